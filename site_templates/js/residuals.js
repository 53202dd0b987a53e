/* Where residuals are drawn as bands, marking a module draws all its points from data/residuals_MODULE.js. */
"use strict";

(function () {
  const page = window.campaignPage || {};
  const files = (page.values && page.values.residual_files) || {};
  const asked = new Set();
  const whole = {};
  const fileOf = (module) => (Object.hasOwn(files, module) ? files[module] : "");
  if (!Object.keys(files).length) return;
  for (const [name, figure] of Object.entries(page.figures)) whole[name] = figure.traces;

  /* The traces as written, and those of the chosen module beside them. */
  function withPoints(module) {
    const points = (window.campaignResiduals || {})[fileOf(module)] || { traces: [], x: {} };
    if (points.shared) points.traces = window.campaignUnfold(points);
    delete points.shared;
    for (const [name, figure] of Object.entries(page.figures)) {
      const places = points.x[name] || [];
      figure.traces = whole[name].concat(places.map((x, i) => Object.assign({}, points.traces[i], { x: points.lists[x] })));
    }
  }

  function load(module) {
    asked.add(module);
    const script = document.createElement("script");
    script.src = fileOf(module);
    script.addEventListener("load", function () {
      if (window.campaign.chosen().module === module) document.dispatchEvent(new CustomEvent("campaign-marks"));
    });
    document.head.append(script);
  }

  /* In the capturing phase of the window: before the figures are drawn anew. */
  window.addEventListener("campaign-marks", function () {
    const module = window.campaign.chosen().module;
    withPoints(module);
    if (module && fileOf(module) && !asked.has(module)) load(module);
  }, true);
})();
