/* Figures come to life: the static picture is drawn over by the plot library as it nears the view, one a task.
   Below each stands a short toolbar. Nothing is computed here: traces and layout are drawn as they were written. */
"use strict";

window.campaign = window.campaign || {};

(function (campaign) {
  const page = window.campaignPage || { figures: {} };
  const figures = new Map();
  const waiting = [];
  let library = null;
  let working = false;

  const CONFIG = {
    displayModeBar: false,
    displaylogo: false,
    showSendToCloud: false,
    showEditInChartStudio: false,
    plotlyServerURL: "",
    showTips: false,
    doubleClick: "reset",
    responsive: false,
    scrollZoom: false,
  };
  const PRINT_WIDTH = 680;
  const PRINT_PIXELS = 2126;

  /* ---- colours ------------------------------------------------------------------------------------------ */

  function swapped(value, style) {
    if (typeof value === "string") {
      if (!/^#[0-9a-f]{6}$/i.test(value)) return value;
      return style.getPropertyValue("--c-" + value.slice(1).toLowerCase()).trim() || value;
    }
    if (Array.isArray(value)) {
      return value.length && typeof value[0] === "number" ? value : value.map((item) => swapped(item, style));
    }
    if (value && typeof value === "object") {
      return Object.fromEntries(Object.entries(value).map(([key, item]) => [key, swapped(item, style)]));
    }
    return value;
  }

  /* ---- drawing ------------------------------------------------------------------------------------------ */

  function panelCount(figure) {
    return Object.keys(figure.spec.layout).filter((key) => key.startsWith("xaxis")).length;
  }

  /* Panels side by side are kept so wide that their titles do not meet; the figure scrolls where a page is narrower. */
  function leastWidth(figure) {
    if (panelCount(figure) < 2) return 0;
    const layout = figure.spec.layout;
    const across = Object.keys(layout).filter((key) => key.startsWith("xaxis"));
    const columns = new Set(across.map((key) => (layout[key].domain || [0])[0])).size;
    const titles = (layout.annotations || []).filter((note) => note.align);
    const longest = Math.max(0, ...titles.flatMap((note) => note.text.split("<br>").map((line) => line.length)));
    return Math.max(544, Math.min(840, 88 + columns * (7.2 * longest + 10)));
  }

  function width(figure) {
    return Math.max(figure.plot.clientWidth, leastWidth(figure));
  }

  function markedTraces(traces) {
    if (!campaign.chosen().module) return traces;
    return traces.map(function (trace) {
      if (!trace.meta || campaign.belongs(trace.meta.module, trace.meta.sensor)) return trace;
      return Object.assign({}, trace, { opacity: 0.12 * (trace.opacity === undefined ? 1 : trace.opacity) });
    });
  }

  function drawn(figure, ranges) {
    const style = getComputedStyle(document.documentElement);
    const layout = swapped(figure.spec.layout, style);
    layout.template = swapped(window.campaignHouseStyle, style);
    layout.width = width(figure);
    layout.height = figure.spec.height;
    for (const [axis, ends] of Object.entries(ranges)) {
      if (layout[axis]) layout[axis] = Object.assign({}, layout[axis], { range: ends });
    }
    return { data: swapped(markedTraces(figure.spec.traces), style), layout: layout };
  }

  /* A figure that is still being drawn must not be taken down: the library goes on with what is gone. */
  function busy(figure, drawing) {
    figure.drawing = Promise.allSettled([figure.drawing, drawing]);
    return drawing;
  }

  /* It is out of the page's layout until it is drawn: the library measures its texts elsewhere, one by one, and each
     time the page would be laid out anew. */
  function makeLive(figure) {
    if (figure.live || figure.stays) return Promise.resolve();
    const live = document.createElement("div");
    live.className = "live";
    live.setAttribute("aria-hidden", "true");
    live.hidden = true;
    figure.plot.append(live);
    figure.live = live;
    const made = drawn(figure, figure.wanted);
    const drawing = library.newPlot(live, made.data, made.layout, CONFIG).then(function () {
      live.hidden = false;
      figure.plot.classList.add("is-live");
      figure.live.on("plotly_click", follow);
      figure.live.on("plotly_hover", (event) => live.classList.toggle("leads", Boolean(address(event.points[0]))));
      figure.live.on("plotly_unhover", () => live.classList.remove("leads"));
      figure.live.on("plotly_relayout", () => showReset(figure));
      showReset(figure);
      figure.element.dataset.state = "live";
      hideTester();
    });
    return busy(figure, drawing);
  }

  /* The library measures texts in a picture of its own beside the page's content: nothing for readers. */
  function hideTester() {
    const tester = document.getElementById("js-plotly-tester");
    if (tester) tester.setAttribute("aria-hidden", "true");
  }

  function makeStill(figure) {
    if (!figure.live) return;
    library.purge(figure.live);
    figure.live.remove();
    figure.live = null;
    figure.plot.classList.remove("is-live");
    figure.element.dataset.state = "still";
  }

  /* Whatever is begun while it waits is waited for too; pressed again by then, the figure stays live. */
  function stillOnceDrawn(figure) {
    const drawing = figure.drawing;
    drawing.then(function () {
      if (!figure.stays) return;
      if (figure.drawing === drawing) makeStill(figure);
      else stillOnceDrawn(figure);
    });
  }

  function redraw(figure) {
    if (!figure.live) return;
    const made = drawn(figure, ranges(figure));
    busy(figure, library.react(figure.live, made.data, made.layout, CONFIG));
  }

  /* Another choice of traces for a figure, with the ranges of its axes, the address of its data and, where they
     differ too, its labels. */
  campaign.changeFigure = function (name, traces, ranges, csv, labels) {
    const figure = figures.get(name);
    if (!figure) return;
    figure.spec.traces = traces;
    if (labels) figure.spec.layout.annotations = labels;
    for (const [axis, ends] of Object.entries(ranges)) {
      figure.spec.layout[axis] = Object.assign({}, figure.spec.layout[axis], { range: ends });
    }
    figure.wanted = {};
    figure.element.querySelector(".tools a").href = csv;
    if (figure.dataTable) {
      figure.dataTable.remove();
      figure.dataTable = null;
      figure.dataButton.setAttribute("aria-expanded", "false");
    }
    if (!figure.live) return;
    const made = drawn(figure, {});
    busy(figure, library.react(figure.live, made.data, made.layout, CONFIG));
  };

  /* Addresses within the site only. */
  function address(point) {
    const href = point && typeof point.customdata === "string" ? point.customdata : "";
    return /^[\w.-]+\.html(#|$)|^#/.test(href) ? href : "";
  }

  function follow(event) {
    const href = address(event.points[0]);
    if (href) window.location.assign(href);
  }

  /* ---- one figure a task, as they near the view ----------------------------------------------------------- */

  function work() {
    if (working || !library || !waiting.length) return;
    working = true;
    setTimeout(function () {
      const figure = waiting.shift();
      makeLive(figure).finally(function () {
        working = false;
        work();
      });
    }, 0);
  }

  /* The library adds style elements for parts that are not used here, unless their ids are taken: the content policy
     forbids such elements. */
  function fetchLibrary() {
    for (const id of window.campaignLibraryStyles) {
      const taken = document.createElement("meta");
      taken.id = id;
      document.head.append(taken);
    }
    const script = document.createElement("script");
    script.src = "assets/plot_library.js";
    script.addEventListener("load", function () {
      library = window.Plotly;
      work();
    });
    document.head.append(script);
  }

  function watch() {
    const observer = new IntersectionObserver(
      function (entries) {
        for (const entry of entries.filter((e) => e.isIntersecting)) {
          observer.unobserve(entry.target);
          waiting.push(figures.get(entry.target.dataset.figure));
        }
        work();
      },
      { rootMargin: "500px" }
    );
    for (const figure of figures.values()) observer.observe(figure.element);
  }

  /* ---- toolbar -------------------------------------------------------------------------------------------- */

  function button(words, hint, act) {
    const made = document.createElement("button");
    made.type = "button";
    made.textContent = words;
    made.title = hint;
    made.addEventListener("click", act);
    return made;
  }

  function buildTools(figure) {
    const tools = figure.element.querySelector(".tools");
    const csv = tools.querySelector("a");
    tools.setAttribute("role", "group");
    tools.setAttribute("aria-label", figure.element.querySelector("figcaption .number").textContent);
    figure.liveButton = button("live", "Draw the figure live, or show the still picture", () => toggleLive(figure));
    figure.liveButton.setAttribute("aria-pressed", "true");
    figure.resetButton = button("reset", "Show the whole figure again", () => reset(figure));
    figure.resetButton.disabled = true;
    figure.dataButton = button("data", "Show the figure's data as a table", () => toggleData(figure));
    figure.dataButton.setAttribute("aria-expanded", "false");
    tools.prepend(figure.liveButton, figure.resetButton, figure.dataButton);
    csv.title = "The figure's data as a file";
    tools.append(
      button("SVG", "Save as vectors, at print size", () => saveSvg(figure)),
      button("PNG", "Save as a picture, 300 dots an inch at print size", () => savePng(figure)),
      button("link", "Copy a link that opens exactly this view", () => copyLink(figure))
    );
  }

  function toggleLive(figure) {
    figure.stays = !figure.stays;
    figure.liveButton.setAttribute("aria-pressed", String(!figure.stays));
    if (figure.stays) stillOnceDrawn(figure);
    else {
      waiting.push(figure);
      work();
    }
  }

  function axes(figure) {
    return Object.keys(figure.spec.layout).filter((key) => /^[xy]axis\d*$/.test(key));
  }

  /* Ranges that differ from those the figure was written with. */
  function ranges(figure) {
    const changed = {};
    if (!figure.live || !figure.live.layout) return changed;
    for (const axis of axes(figure)) {
      const now = figure.live.layout[axis].range;
      const then = figure.spec.layout[axis].range;
      const size = Math.abs(then[1] - then[0]);
      if (now.some((end, i) => Math.abs(end - then[i]) > 1e-6 * size)) changed[axis] = now.slice();
    }
    return changed;
  }

  function showReset(figure) {
    figure.resetButton.disabled = Object.keys(ranges(figure)).length === 0;
  }

  function reset(figure) {
    if (!figure.live) return;
    const update = {};
    for (const axis of axes(figure)) update[axis + ".range"] = figure.spec.layout[axis].range.slice();
    busy(figure, library.relayout(figure.live, update));
    campaign.announce("The whole figure is shown");
  }

  function copyLink(figure) {
    const hash = campaign.writeView(figure.element.id, ranges(figure), campaign.chosen());
    history.replaceState(null, "", hash);
    const link = window.location.href;
    const told = () => campaign.announce("The link to this view is copied and stands in the address line");
    const only = () => campaign.announce("The link to this view stands in the address line");
    if (navigator.clipboard) navigator.clipboard.writeText(link).then(told, only);
    else only();
    flash(figure.element.querySelector(".tools"), "link is in the address line");
  }

  function flash(tools, words) {
    const said = document.createElement("span");
    said.className = "said";
    said.textContent = words;
    said.setAttribute("aria-hidden", "true");
    tools.append(said);
    setTimeout(() => said.remove(), 2500);
  }

  /* ---- saving ---------------------------------------------------------------------------------------------- */

  campaign.save = function (name, type, content) {
    const link = document.createElement("a");
    link.href = URL.createObjectURL(content instanceof Blob ? content : new Blob([content], { type: type }));
    link.download = name;
    document.body.append(link);
    link.click();
    link.remove();
    setTimeout(() => URL.revokeObjectURL(link.href), 10000);
  };

  function fileName(figure, ending) {
    return page.slug + "_" + figure.element.dataset.figure + ending;
  }

  /* On paper: the light colours, white ground, the ranges now shown. */
  function onPaper(figure) {
    const layout = Object.assign({}, figure.spec.layout, {
      template: window.campaignHouseStyle,
      paper_bgcolor: "#ffffff",
      plot_bgcolor: "#ffffff",
    });
    for (const [axis, ends] of Object.entries(ranges(figure))) layout[axis] = Object.assign({}, layout[axis], { range: ends });
    return { data: markedTraces(figure.spec.traces), layout: layout, config: CONFIG };
  }

  function toImage(figure, format, scale) {
    const size = { format: format, width: PRINT_WIDTH, height: figure.spec.height, scale: scale };
    return library.toImage(onPaper(figure), size);
  }

  function saveSvg(figure) {
    if (!library) {
      campaign.save(fileName(figure, ".svg"), "image/svg+xml", stillSvg(figure));
      return;
    }
    toImage(figure, "svg", 1).then(function (address) {
      campaign.save(fileName(figure, ".svg"), "image/svg+xml", decodeURIComponent(address.slice(address.indexOf(",") + 1)));
    });
  }

  function stillSvg(figure) {
    const copy = figure.plot.querySelector("svg").cloneNode(true);
    copy.setAttribute("color", "#1b2530");
    copy.setAttribute("font-family", "sans-serif");
    return new XMLSerializer().serializeToString(copy);
  }

  function savePng(figure) {
    if (!library) {
      campaign.announce("The picture can be saved once the plot library has loaded");
      return;
    }
    toImage(figure, "png", PRINT_PIXELS / PRINT_WIDTH).then(function (address) {
      const bytes = Uint8Array.from(atob(address.slice(address.indexOf(",") + 1)), (c) => c.charCodeAt(0));
      campaign.save(fileName(figure, ".png"), "image/png", new Blob([bytes], { type: "image/png" }));
    });
  }

  /* ---- the data as a table ----------------------------------------------------------------------------------- */

  function toggleData(figure) {
    const open = figure.dataButton.getAttribute("aria-expanded") === "true";
    figure.dataButton.setAttribute("aria-expanded", String(!open));
    if (!figure.dataTable) figure.element.append((figure.dataTable = campaign.figureTable(figure.spec, figure.element.id)));
    figure.dataTable.hidden = open;
  }

  /* ---- opening exactly a view --------------------------------------------------------------------------------- */

  function openView() {
    const view = campaign.readView(window.location.hash);
    if (view.module) campaign.choose(view.module, view.sensor);
    for (const figure of figures.values()) {
      if (figure.element.id !== view.anchor || !Object.keys(view.ranges).length) continue;
      figure.wanted = view.ranges;
      figure.element.scrollIntoView();
      if (figure.live) {
        const update = {};
        for (const [axis, ends] of Object.entries(view.ranges)) update[axis + ".range"] = ends;
        busy(figure, library.relayout(figure.live, update));
      }
    }
    const target = document.getElementById(view.anchor);
    if (target && window.location.hash.includes("?")) target.scrollIntoView();
  }

  /* ---- beginning ------------------------------------------------------------------------------------------ */

  for (const element of document.querySelectorAll("figure[data-figure]")) {
    const spec = page.figures[element.dataset.figure];
    if (!spec) continue;
    const figure = { element: element, plot: element.querySelector(".plot"), spec: spec, live: null, wanted: {} };
    Object.assign(figure, { stays: false, drawing: Promise.resolve() });
    if (panelCount(figure) > 1) figure.plot.classList.add("panels");
    figures.set(element.dataset.figure, figure);
    buildTools(figure);
  }
  openView();
  window.addEventListener("hashchange", openView);
  document.addEventListener("campaign-marks", () => figures.forEach(redraw));
  window.matchMedia("(prefers-color-scheme: dark)").addEventListener("change", () => figures.forEach(redraw));
  let resizing = 0;
  window.addEventListener("resize", function () {
    clearTimeout(resizing);
    resizing = setTimeout(() => figures.forEach(redraw), 150);
  });
  if (figures.size) {
    watch();
    if (document.readyState === "complete") fetchLibrary();
    else window.addEventListener("load", () => setTimeout(fetchLibrary, 0));
  }
})(window.campaign);
