/* The page's data as every other script reads it: what traces, axes and labels share is put back into each,
   sentences are filled with their words, links with their addresses. pages/page_data.py folds them. */
"use strict";

(function (page) {
  const GAP = "\ue000";
  const BETWEEN = "|";

  function whole(parted, shared) {
    const made = Object.assign({}, shared[parted.$], parted);
    delete made.$;
    return made;
  }

  function filled(sentence, texts, points) {
    const fixed = texts[sentence.t].split(GAP);
    const words = sentence.v.map((column) => column.split(BETWEEN));
    return Array.from({ length: points }, function (_, i) {
      return fixed.slice(1).reduce(function (text, after, gap) {
        return text + (words[gap].length > 1 ? words[gap][i] : words[gap][0]) + after;
      }, fixed[0]);
    });
  }

  function trace(folded, shared, texts) {
    const made = whole(folded, shared);
    const points = (made.x || []).length;
    if (made.meta !== undefined) made.meta = shared[made.meta];
    if (Array.isArray(made.hovertext)) made.hovertext = made.hovertext.map((place) => texts[place]);
    else if (made.hovertext && made.hovertext.v) made.hovertext = filled(made.hovertext, texts, points);
    if (made.customdata !== undefined) {
      const places = Array.isArray(made.customdata) ? made.customdata : Array(points).fill(made.customdata);
      made.customdata = places.map((place) => texts[place]);
    }
    return made;
  }

  /* For scripts that bring further traces with looks and texts of their own. */
  window.campaignUnfold = (content) => content.traces.map((folded) => trace(folded, content.shared, content.texts));

  /* For scripts that bring whole figures. */
  window.campaignUnfoldFigures = function (content) {
    for (const figure of Object.values(content.figures)) {
      figure.traces = figure.traces.map((folded) => trace(folded, content.shared, content.texts));
      for (const key of Object.keys(figure.layout)) {
        if (/^[xy]axis\d*$/.test(key)) figure.layout[key] = whole(figure.layout[key], content.shared);
      }
      figure.layout.annotations = figure.layout.annotations.map((note) => whole(note, content.shared));
    }
  };

  if (page && page.shared) window.campaignUnfoldFigures(page);
})(window.campaignPage);
