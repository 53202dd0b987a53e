/* Tables sort by any column: a head becomes a button; missing values stay last. */
"use strict";

window.campaign = window.campaign || {};

(function (campaign) {
  function key(row, column) {
    const cell = row.cells[column];
    if (cell.dataset.sort === undefined) return cell.textContent.trim();
    return cell.dataset.sort === "" ? NaN : Number(cell.dataset.sort);
  }

  function missing(value) {
    return value === "" || Number.isNaN(value);
  }

  function compare(a, b, way) {
    if (missing(a) || missing(b)) return Number(missing(a)) - Number(missing(b));
    return way * (typeof a === "number" ? a - b : campaign.inOrder(a, b));
  }

  function sort(table, column, way) {
    const body = table.tBodies[0];
    const rows = [...body.rows].map((row) => [key(row, column), row]);
    rows.sort((first, second) => compare(first[0], second[0], way));
    body.append(...rows.map((pair) => pair[1]));
  }

  function choose(table, head, column) {
    const way = head.getAttribute("aria-sort") === "ascending" ? -1 : 1;
    for (const other of table.tHead.rows[0].cells) other.removeAttribute("aria-sort");
    head.setAttribute("aria-sort", way === 1 ? "ascending" : "descending");
    sort(table, column, way);
    campaign.announce("Sorted by " + head.textContent.trim() + (way === 1 ? ", rising" : ", falling"));
  }

  for (const table of document.querySelectorAll("table[data-table]")) {
    [...table.tHead.rows[0].cells].forEach(function (head, column) {
      const button = document.createElement("button");
      button.type = "button";
      button.append(...head.childNodes);
      button.addEventListener("click", () => choose(table, head, column));
      head.append(button);
    });
  }
})(window.campaign);
