/* Choosing a module or a sensor anywhere marks it everywhere on the page.
   A choice is { module, sensor }; an empty text means every one. Parts of the page listen to "campaign-marks". */
"use strict";

window.campaign = window.campaign || {};

(function (campaign) {
  const announcement = document.querySelector(".announcement");
  let chosen = { module: "", sensor: "" };

  campaign.announce = function (words) {
    announcement.textContent = words;
  };

  campaign.chosen = function () {
    return chosen;
  };

  /* Whether something of a module and a sensor (empty: of all of them) belongs to the choice. */
  campaign.belongs = function (module, sensor) {
    if (!chosen.module) return true;
    return module === chosen.module && (!chosen.sensor || !sensor || sensor === chosen.sensor);
  };

  campaign.choose = function (module, sensor) {
    chosen = { module: module || "", sensor: module ? sensor || "" : "" };
    markElements();
    showChoice();
    document.dispatchEvent(new CustomEvent("campaign-marks"));
    campaign.announce(chosen.module ? "Marked: " + inWords() : "Nothing is marked");
  };

  function inWords() {
    return chosen.module + (chosen.sensor ? " " + chosen.sensor : "");
  }

  function markElements() {
    for (const element of document.querySelectorAll("[data-module]")) {
      const sensor = element.dataset.sensor || "";
      const belongs = campaign.belongs(element.dataset.module, sensor);
      element.classList.toggle("marked", belongs && Boolean(chosen.module));
      element.classList.toggle("faded", !belongs);
    }
  }

  /* Marks what was added to the page since. */
  campaign.mark = markElements;

  /* Every module of the page with its sensors, from rows, edges and traces. */
  function known() {
    const modules = new Map();
    const add = function (module, sensor) {
      if (!module) return;
      if (!modules.has(module)) modules.set(module, new Set());
      if (sensor) modules.get(module).add(sensor);
    };
    for (const element of document.querySelectorAll("[data-module]")) add(element.dataset.module, element.dataset.sensor);
    for (const rows of Object.values((window.campaignPage || {}).rows || {})) for (const row of rows) add(row[0], row[1]);
    const figures = (window.campaignPage || {}).figures || {};
    for (const figure of Object.values(figures)) {
      for (const trace of figure.traces) if (trace.meta) add(trace.meta.module, trace.meta.sensor);
    }
    return modules;
  }

  let moduleList = null;
  let sensorList = null;
  let modules = new Map();

  function option(value, words) {
    const made = document.createElement("option");
    made.value = value;
    made.textContent = words;
    return made;
  }

  function fillSensors() {
    const sensors = [...(modules.get(chosen.module) || [])].sort(campaign.inOrder);
    sensorList.replaceChildren(option("", "every sensor"), ...sensors.map((s) => option(s, s)));
    sensorList.value = chosen.sensor;
    sensorList.hidden = sensors.length < 2;
  }

  function showChoice() {
    if (!moduleList) return;
    moduleList.value = chosen.module;
    fillSensors();
  }

  campaign.inOrder = function (a, b) {
    return a.localeCompare(b, "en", { numeric: true });
  };

  function list(name, change) {
    const made = document.createElement("select");
    made.setAttribute("aria-label", name);
    made.addEventListener("change", change);
    return made;
  }

  function buildChooser() {
    modules = known();
    if (modules.size < 2) return;
    const line = document.querySelector("main > h1 + .chooser") || document.createElement("p");
    line.className = "chooser";
    moduleList = list("Mark a module", () => campaign.choose(moduleList.value, ""));
    sensorList = list("Mark a sensor", () => campaign.choose(chosen.module, sensorList.value));
    moduleList.append(option("", "none"), ...[...modules.keys()].sort(campaign.inOrder).map((m) => option(m, m)));
    sensorList.hidden = true;
    line.append("Mark on this page ", moduleList, " ", sensorList);
    document.querySelector("main > h1").after(line);
  }

  function chooseByRow(event) {
    const row = event.target.closest("tr[data-module]");
    if (!row || event.target.closest("a, button") || String(getSelection())) return;
    const same = chosen.module === row.dataset.module && chosen.sensor === (row.dataset.sensor || "");
    if (same) campaign.choose("", "");
    else campaign.choose(row.dataset.module, row.dataset.sensor);
  }

  /* The edges of a map say their sensor only; their module is that of the tile they stand in. */
  for (const edge of document.querySelectorAll(".skin-map .edge")) {
    edge.dataset.module = edge.closest("svg").querySelector(".module").dataset.module;
  }

  buildChooser();
  document.addEventListener("click", chooseByRow);
  document.addEventListener("keydown", function (event) {
    if (event.key === "Escape" && chosen.module) campaign.choose("", "");
  });
})(window.campaign);
