/* The page's data as every other script reads it: what traces, axes, shapes and labels share is put back into each,
   numbers are unpacked, sentences filled with their words, links with their addresses. pages/page_data.py folds them. */
"use strict";

(function (page) {
  const GAP = "\ue000";
  const BETWEEN = "|";

  const LETTERS = "ABCDEFGHIJKLMNOPQRSTUVWXYZabcdefghijklmnopqrstuvwxyz0123456789-_";
  const PLACES = new Map(Array.from(LETTERS, (letter, place) => [letter, place]));
  const NOTHING = ".";

  /* pages/packed_numbers.py packs them. */
  function unpacked(text) {
    if (typeof text !== "string") return text;
    const unit = Math.pow(10, PLACES.get(text[0]));
    const made = [];
    let number = 0;
    let step = 0;
    let scale = 1;
    for (let i = 1; i < text.length; i += 1) {
      if (text[i] === NOTHING) {
        made.push(null);
        continue;
      }
      const place = PLACES.get(text[i]);
      step += (place % 32) * scale;
      scale *= 32;
      if (place < 32) {
        number += step % 2 ? -(step - 1) / 2 : step / 2;
        made.push(number / unit);
        step = 0;
        scale = 1;
      }
    }
    return made;
  }

  function whole(parted, shared) {
    const made = Object.assign({}, shared[parted.$], parted);
    delete made.$;
    return made;
  }

  function filled(sentence, texts, points) {
    const fixed = texts[sentence.t].split(GAP);
    const words = sentence.v.map((place) => texts[place].split(BETWEEN));
    return Array.from({ length: points }, function (_, i) {
      return fixed.slice(1).reduce(function (text, after, gap) {
        return text + (words[gap].length > 1 ? words[gap][i] : words[gap][0]) + after;
      }, fixed[0]);
    });
  }

  function bars(folded, shared, lists) {
    const made = whole(folded, shared);
    for (const side of ["array", "arrayminus"]) if (side in made) made[side] = lists[made[side]];
    return made;
  }

  function trace(folded, shared, lists, texts) {
    const made = Object.assign({ name: "" }, whole(folded, shared));
    for (const key of ["x", "y", "base"]) if (typeof folded[key] === "number") made[key] = lists[folded[key]];
    for (const key of ["error_x", "error_y"]) if (folded[key]) made[key] = bars(folded[key], shared, lists);
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

  /* For scripts that bring further traces with looks, numbers and texts of their own. */
  window.campaignUnfold = function (content) {
    content.lists = content.lists.map(unpacked);
    return content.traces.map((folded) => trace(folded, content.shared, content.lists, content.texts));
  };

  /* For scripts that bring whole figures. */
  window.campaignUnfoldFigures = function (content) {
    const lists = content.lists.map(unpacked);
    for (const figure of Object.values(content.figures)) {
      figure.traces = figure.traces.map((folded) => trace(folded, content.shared, lists, content.texts));
      for (const key of Object.keys(figure.layout)) {
        if (/^[xy]axis\d*$/.test(key)) figure.layout[key] = whole(figure.layout[key], content.shared);
      }
      for (const key of ["annotations", "shapes"]) {
        if (figure.layout[key]) figure.layout[key] = figure.layout[key].map((part) => whole(part, content.shared));
      }
    }
  };

  if (page && page.shared) window.campaignUnfoldFigures(page);
})(window.campaignPage);
