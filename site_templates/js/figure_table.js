/* A figure's data as a real table, built from its traces when asked for. */
"use strict";

window.campaign = window.campaign || {};

(function (campaign) {
  const MINUS = "\u2212";

  function plain(text) {
    const read = new DOMParser().parseFromString(String(text || "").replace(/<br\s*\/?>/g, " "), "text/html");
    return read.body.textContent;
  }

  function number(value) {
    if (value === null || value === undefined) return "";
    return String(value).replace("-", MINUS);
  }

  function titleOf(spec, trace, letter) {
    const own = spec.layout[letter + "axis" + (trace[letter + "axis"] || letter).slice(1)];
    const first = spec.layout[letter + "axis"];
    return plain((own && own.title && own.title.text) || (first && first.title && first.title.text) || letter);
  }

  function panelTitle(spec, trace) {
    const reference = (trace.xaxis || "x") + " domain";
    const note = (spec.layout.annotations || []).find((a) => a.xref === reference);
    return note ? plain(note.text) : "";
  }

  function series(spec, trace) {
    const meta = trace.meta || {};
    const named = plain(trace.name) || [meta.module, meta.sensor].filter(Boolean).join(" ");
    return [panelTitle(spec, trace), named].filter((part, i, all) => part && all.indexOf(part) === i).join(", ");
  }

  function limits(trace, index) {
    const error = trace.error_x || trace.error_y;
    if (!error) return ["", ""];
    const centre = (trace.error_x ? trace.x : trace.y)[index];
    const low = (error.arrayminus || error.array)[index];
    const high = error.array[index];
    if ([centre, low, high].some((v) => v === null)) return ["", ""];
    return [centre - low, centre + high].map((v) => number(Number(v.toPrecision(6))));
  }

  function cell(kind, words, className) {
    const made = document.createElement(kind);
    made.textContent = words;
    if (className) made.className = className;
    return made;
  }

  function row(spec, trace, index, withLimits) {
    const made = document.createElement("tr");
    const first = cell("td", series(spec, trace));
    const href = Array.isArray(trace.customdata) ? trace.customdata[index] : "";
    if (typeof href === "string" && /^[\w.-]+\.html(#|$)|^#/.test(href)) {
      const link = cell("a", first.textContent || "open");
      link.href = href;
      first.replaceChildren(link);
    }
    made.append(first, cell("td", number(trace.x[index]), "n"), cell("td", number(trace.y[index]), "n"));
    if (withLimits) made.append(...limits(trace, index).map((words) => cell("td", words, "n")));
    return made;
  }

  function head(words) {
    const made = cell("th", words);
    made.scope = "col";
    return made;
  }

  campaign.figureTable = function (spec, id) {
    const shown = spec.traces.filter((trace) => trace.fill !== "toself" && trace.x.length);
    const withLimits = shown.some((trace) => trace.error_x || trace.error_y);
    const table = document.createElement("table");
    const heads = document.createElement("tr");
    const first = shown[0] || { x: [], y: [] };
    heads.append(head("Series"), head(titleOf(spec, first, "x")), head(titleOf(spec, first, "y")));
    if (withLimits) heads.append(head("Lower limit"), head("Upper limit"));
    table.createTHead().append(heads);
    const body = table.createTBody();
    for (const trace of shown) for (let i = 0; i < trace.x.length; i += 1) body.append(row(spec, trace, i, withLimits));
    const scroll = document.createElement("div");
    scroll.className = "scroll data-table";
    scroll.tabIndex = 0;
    scroll.setAttribute("role", "region");
    scroll.setAttribute("aria-label", "Data of " + id.replace("-", " "));
    scroll.append(table);
    return scroll;
  };
})(window.campaign);
