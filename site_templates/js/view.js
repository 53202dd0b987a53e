/* The part of an address after "#": an anchor, and for a figure the exact view and what is marked:
   #figure-lines?x=0,40&y=90,140&mark=M01,AB */
"use strict";

window.campaign = window.campaign || {};

(function (campaign) {
  campaign.readView = function (hash) {
    const [anchor, query] = decodedParts(hash.replace(/^#/, ""));
    const view = { anchor: anchor, ranges: {}, module: "", sensor: "" };
    for (const [key, value] of new URLSearchParams(query)) {
      const ends = value.split(",");
      if (key === "mark") [view.module, view.sensor] = [ends[0], ends[1] || ""].map(decodeURIComponent);
      else if (/^[xy]\d*$/.test(key) && ends.length === 2 && ends.every((e) => Number.isFinite(Number(e)) && e)) {
        view.ranges[key[0] + "axis" + key.slice(1)] = ends.map(Number);
      }
    }
    return view;
  };

  function decodedParts(text) {
    const place = text.indexOf("?");
    const anchor = place < 0 ? text : text.slice(0, place);
    try {
      return [decodeURIComponent(anchor), place < 0 ? "" : text.slice(place + 1)];
    } catch (fault) {
      return ["", ""];
    }
  }

  /* The hash of a view: ranges by axis name ("xaxis2"), each [from, to]. */
  campaign.writeView = function (anchor, ranges, chosen) {
    const parts = Object.entries(ranges).map(function ([axis, ends]) {
      return axis[0] + axis.slice(5) + "=" + ends.map((end) => Number(end.toPrecision(6))).join(",");
    });
    if (chosen.module) {
      parts.push("mark=" + [chosen.module, chosen.sensor].map((t) => encodeURIComponent(encodeURIComponent(t))).join(","));
    }
    return "#" + encodeURIComponent(anchor) + (parts.length ? "?" + parts.join("&") : "");
  };
})(window.campaign);
