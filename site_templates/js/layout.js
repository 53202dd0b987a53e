/* Page 8: picking a module, a placement and what its lengths are read by. Drawings are written beforehand, a script a
   module and choice of lines, fetched when they are asked for. */
"use strict";

(function (campaign) {
  const place = document.querySelector("[data-shapes]");
  const given = ((window.campaignPage || {}).values || {}).layout;
  if (!place || !given || !given.modules.length || !campaign.changeFigure) return;
  const said = document.querySelector("[data-part='said']");
  const caption = document.querySelector("#figure-shape figcaption");
  const firstCaption = caption.lastChild.textContent;
  const unfolded = new WeakSet();
  const asked = new Map();
  let current = { module: moduleOf(given.first[0]), placement: given.first[1], line: given.first[2] };

  function moduleOf(name) {
    return given.modules.find((one) => one.module === name);
  }

  function isFirst() {
    return current.module.module === given.first[0] && current.placement === given.first[1] && current.line === given.first[2];
  }

  function address() {
    return current.module.scripts[current.line];
  }

  function list(words, change) {
    const label = document.createElement("label");
    const made = document.createElement("select");
    made.addEventListener("change", change);
    label.append(words, made);
    place.append(label);
    return made;
  }

  function option(value, words) {
    const made = document.createElement("option");
    made.value = String(value);
    made.textContent = words;
    return made;
  }

  function step(words, by) {
    const made = document.createElement("button");
    made.type = "button";
    made.textContent = words;
    made.addEventListener("click", () => pick({ placement: current.placement + by }));
    return made;
  }

  function shapes(script) {
    const found = (window.campaignShapes || {})[script];
    if (found && !unfolded.has(found)) {
      window.campaignUnfoldFigures(found);
      unfolded.add(found);
    }
    return found;
  }

  function fetchShapes(script, then) {
    if (shapes(script)) {
      then();
      return;
    }
    const before = asked.get(script);
    if (before) {
      before.addEventListener("load", then);
      return;
    }
    const made = document.createElement("script");
    asked.set(script, made);
    made.src = script;
    made.addEventListener("load", then);
    made.addEventListener("error", () => campaign.announce("The shapes of " + current.module.module + " cannot be read"));
    document.head.append(made);
  }

  function draw() {
    const found = shapes(address());
    const figure = found && found.figures[current.placement];
    if (!figure) return;
    const layout = figure.layout;
    const ranges = {};
    for (const axis of Object.keys(layout).filter((key) => /^[xy]axis/.test(key))) ranges[axis] = layout[axis].range;
    campaign.changeFigure("shape", figure.traces, ranges, "tables/layout.csv", layout.annotations);
    said.textContent = found.said[current.placement];
    caption.lastChild.textContent = isFirst() ? firstCaption : " " + found.captions[current.placement];
  }

  /* What the lists offer of the module that is chosen. */
  function fill() {
    const module = current.module;
    placementList.replaceChildren(...module.placements.map((name, i) => option(i, name)));
    const lines = module.lines[current.placement];
    if (!lines.includes(current.line)) current.line = lines[0];
    lineList.replaceChildren(...lines.map((line) => option(line, given.lines[line])));
    moduleList.value = module.module;
    placementList.value = String(current.placement);
    lineList.value = String(current.line);
    before.disabled = current.placement === 0;
    after.disabled = current.placement === module.placements.length - 1;
  }

  function pick(change) {
    current = Object.assign({}, current, change);
    current.placement = Math.max(0, Math.min(current.placement, current.module.placements.length - 1));
    fill();
    const wanted = address();
    fetchShapes(wanted, () => wanted === address() && draw());
  }

  function follow() {
    const module = moduleOf(campaign.chosen().module);
    if (module && module !== current.module) pick({ module: module });
  }

  const moduleList = list("Module", function () {
    pick({ module: moduleOf(moduleList.value) });
  });
  const placementList = list("placement", () => pick({ placement: Number(placementList.value) }));
  const lineList = list("read by", () => pick({ line: Number(lineList.value) }));
  const steps = document.createElement("span");
  steps.className = "steps";
  const before = step("previous placement", -1);
  const after = step("next placement", 1);
  steps.append(before, after);
  place.append(steps);
  moduleList.append(...given.modules.map((one) => option(one.module, one.module)));
  fill();
  place.hidden = false;
  document.addEventListener("campaign-marks", follow);
  if (campaign.chosen().module) follow();
})(window.campaign);
