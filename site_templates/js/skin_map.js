/* The skin map's picker: colours every edge by the figure that the reader picks. Steps and texts come written. */
"use strict";

window.campaign = window.campaign || {};

(function (campaign) {
  const map = document.getElementById("skin-map");
  const values = ((window.campaignPage || {}).values || {}).skin_map;
  if (!map || !values) return;
  const SVG = "http://www.w3.org/2000/svg";

  function paintEdge(edge, step, text, scale) {
    const paint = edge.querySelector(".paint");
    const words = step < 0 ? text : (text + " " + scale.unit).trim();
    const name = edge.dataset.module + " " + edge.dataset.sensor + ": " + words;
    edge.setAttribute("aria-label", name);
    edge.querySelector("title").textContent = name + ", " + scale.title;
    if (paint) paint.setAttribute("stroke", step < 0 ? "#faf8f3" : values.colours[step]);
    const tile = edge.closest("svg");
    const label = tile.querySelectorAll(".values text")[[...tile.querySelectorAll("a.edge")].indexOf(edge)];
    label.textContent = step < 0 ? "" : text;
  }

  function swatch(colour, words) {
    const made = document.createElement("span");
    const svg = document.createElementNS(SVG, "svg");
    const line = document.createElementNS(SVG, "rect");
    for (const [key, value] of Object.entries({ width: 22, height: 10, "aria-hidden": "true" })) svg.setAttribute(key, value);
    const looks = { x: 0.5, y: 0.5, width: 21, height: 9, fill: colour, stroke: "currentColor", "stroke-width": 0.75 };
    for (const [key, value] of Object.entries(looks)) line.setAttribute(key, value);
    svg.append(line);
    made.append(svg, words);
    return made;
  }

  function showScale(scale) {
    map.setAttribute("aria-label", "Skin map: " + scale.title);
    map.querySelector(".picked-unit").textContent = scale.unit ? ", " + scale.unit : "";
    map.querySelector(".low").textContent = scale.low;
    map.querySelector(".high").textContent = scale.high;
    const verdicts = map.querySelector(".verdicts");
    map.querySelector(".ends").hidden = scale.marks.length > 0;
    verdicts.hidden = scale.marks.length === 0;
    verdicts.replaceChildren(...scale.marks.map(([step, words]) => swatch(values.colours[step], words)));
  }

  function pick(key) {
    const figure = values.figures[key];
    for (const edge of map.querySelectorAll("a.edge")) {
      const [step, text] = figure.steps[Number(edge.dataset.edge)];
      paintEdge(edge, step, text, figure.scale);
    }
    showScale(figure.scale);
    campaign.announce("The map shows " + figure.scale.title);
  }

  function buildPicker() {
    const shown = map.querySelector(".picked");
    const keys = values.order;
    if (!shown || keys.length < 2) return;
    const list = document.createElement("select");
    list.setAttribute("aria-label", "Figure that the map shows");
    for (const key of keys) {
      const option = document.createElement("option");
      option.value = key;
      option.textContent = values.figures[key].scale.title;
      option.selected = option.textContent === shown.textContent;
      list.append(option);
    }
    list.addEventListener("change", () => pick(list.value));
    shown.replaceWith(list);
    if (values.figures[list.value].scale.marks.length) showScale(values.figures[list.value].scale);
  }

  for (const edge of map.querySelectorAll("a.edge")) {
    const title = document.createElementNS(SVG, "title");
    const shown = map.querySelector(".picked");
    title.textContent = edge.getAttribute("aria-label") + (shown ? ", " + shown.textContent : "");
    edge.prepend(title);
  }
  /* An address like #skin-map?show=KEY picks a figure. */
  function pickByAddress() {
    const list = map.querySelector("select");
    const key = new URLSearchParams(window.location.hash.split("?")[1] || "").get("show");
    if (!list || !window.location.hash.startsWith("#skin-map") || !values.order.includes(key)) return;
    list.value = key;
    pick(key);
  }

  buildPicker();
  pickByAddress();
  window.addEventListener("hashchange", pickByAddress);
})(window.campaign);
