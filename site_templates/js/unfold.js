/* The page's data as every other script reads it: what traces, axes and labels share is put back into each,
   sentences are filled with their words, links with their addresses. pages/page_data.py folds them. */
"use strict";

(function (page) {
  if (!page || !page.shared) return;
  const GAP = "\ue000";
  const BETWEEN = "|";

  function whole(parted) {
    const made = Object.assign({}, page.shared[parted.$], parted);
    delete made.$;
    return made;
  }

  function filled(sentence, points) {
    const fixed = page.texts[sentence.t].split(GAP);
    const words = sentence.v.map((column) => column.split(BETWEEN));
    return Array.from({ length: points }, function (_, i) {
      return fixed.slice(1).reduce(function (text, after, gap) {
        return text + (words[gap].length > 1 ? words[gap][i] : words[gap][0]) + after;
      }, fixed[0]);
    });
  }

  function trace(folded) {
    const made = whole(folded);
    const points = (made.x || []).length;
    if (made.meta !== undefined) made.meta = page.shared[made.meta];
    if (Array.isArray(made.hovertext)) made.hovertext = made.hovertext.map((place) => page.texts[place]);
    else if (made.hovertext && made.hovertext.v) made.hovertext = filled(made.hovertext, points);
    if (made.customdata !== undefined) {
      const places = Array.isArray(made.customdata) ? made.customdata : Array(points).fill(made.customdata);
      made.customdata = places.map((place) => page.texts[place]);
    }
    return made;
  }

  for (const figure of Object.values(page.figures)) {
    figure.traces = figure.traces.map(trace);
    for (const key of Object.keys(figure.layout)) {
      if (/^[xy]axis\d*$/.test(key)) figure.layout[key] = whole(figure.layout[key]);
    }
    figure.layout.annotations = figure.layout.annotations.map(whole);
  }
})(window.campaignPage);
