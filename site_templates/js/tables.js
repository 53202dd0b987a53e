/* Tables sort by any column: a head becomes a button; missing values stay last. A long table stands in the page
   with its first rows; the others come from the page's data when they are asked for, sorted or printed. */
"use strict";

window.campaign = window.campaign || {};

(function (campaign) {
  const further = (window.campaignPage || {}).rows || {};

  /* ---- further rows ---------------------------------------------------------------------------------------- */

  function cell(kind, given) {
    const [words, href, sort] = Array.isArray(given) ? given : [given];
    const made = document.createElement("td");
    if (kind) made.className = kind;
    if (sort !== undefined) made.dataset.sort = sort;
    let place = made;
    if (href) {
      place = document.createElement("a");
      place.href = href;
      made.append(place);
    }
    if (kind !== "c") place.textContent = words;
    else words.split("/").forEach((part, i) => place.append(...(i ? ["/", document.createElement("wbr"), part] : [part])));
    return made;
  }

  function row(kinds, given) {
    const made = document.createElement("tr");
    if (given[0]) made.dataset.module = given[0];
    if (given[1]) made.dataset.sensor = given[1];
    made.append(...given.slice(2).map((content, i) => cell(kinds[i], content)));
    return made;
  }

  function complete(table) {
    const rows = further[table.dataset.table];
    if (!rows || table.dataset.whole) return;
    table.dataset.whole = "yes";
    const kinds = [...table.tBodies[0].rows[0].cells].map((first) => first.className);
    table.tBodies[0].append(...rows.map((given) => row(kinds, given)));
    const tools = table.closest("section").querySelector(".tools");
    const said = tools.querySelector(".rows");
    const before = table.tBodies[0].rows.length - rows.length;
    if (said) said.textContent = said.textContent.replace(String(before), String(before + rows.length));
    const button = tools.querySelector("button");
    if (button) button.remove();
    campaign.mark();
  }

  function offerFurther(table) {
    const rows = further[table.dataset.table];
    if (!rows) return;
    const button = document.createElement("button");
    button.type = "button";
    button.textContent = "show " + rows.length + " more";
    button.addEventListener("click", function () {
      complete(table);
      campaign.announce(rows.length + " more rows are shown");
      table.closest(".scroll").focus();
    });
    table.closest("section").querySelector(".tools .rows").after(" ", button);
  }

  /* ---- sorting ---------------------------------------------------------------------------------------------- */

  /* The number that a cell begins with; thin and figure spaces only align it. */
  function leading(text) {
    const found = /^\s*([-\u2212]?)(\d+(?:\.\d+)?)/.exec(text);
    return found ? Number(found[2]) * (found[1] ? -1 : 1) : NaN;
  }

  function key(row, column) {
    const own = row.cells[column];
    if (!own.classList.contains("n")) return own.textContent.trim();
    if (own.dataset.sort === undefined) return leading(own.textContent);
    return own.dataset.sort === "" ? NaN : Number(own.dataset.sort);
  }

  function missing(value) {
    return value === "" || Number.isNaN(value);
  }

  function compare(a, b, way) {
    if (missing(a) || missing(b)) return Number(missing(a)) - Number(missing(b));
    return way * (typeof a === "number" ? a - b : campaign.inOrder(a, b));
  }

  function sort(table, column, way) {
    complete(table);
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

  const tables = [...document.querySelectorAll("table[data-table]")];
  for (const table of tables) {
    [...table.tHead.rows[0].cells].forEach(function (head, column) {
      const button = document.createElement("button");
      button.type = "button";
      button.append(...head.childNodes);
      button.addEventListener("click", () => choose(table, head, column));
      head.append(button);
    });
    offerFurther(table);
  }
  window.addEventListener("beforeprint", () => tables.forEach(complete));
  document.addEventListener("campaign-marks", function () {
    const { module, sensor } = campaign.chosen();
    const holds = (given) => given[0] === module && (!sensor || !given[1] || given[1] === sensor);
    if (module) tables.filter((t) => (further[t.dataset.table] || []).some(holds)).forEach(complete);
  });
})(window.campaign);
