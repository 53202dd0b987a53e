/* Page 5: picking a sensor, a rate and a cycle. Each sensor's loops are a classic script of their own, fetched
   when they are asked for; curves are drawn as they were written. */
"use strict";

(function (campaign) {
  const place = document.querySelector("[data-loops]");
  const given = ((window.campaignPage || {}).values || {}).loops;
  if (!place || !given || !given.sensors.length || !campaign.changeFigure) return;
  const EVERY = "";
  const FEW = "few";
  let current = given.sensors.find((s) => s.module === given.first[0] && s.sensor === given.first[1]);

  function list(words, change) {
    const label = document.createElement("label");
    const made = document.createElement("select");
    made.addEventListener("change", change);
    label.append(words + " ", made);
    place.append(label, " ");
    return made;
  }

  function option(value, words) {
    const made = document.createElement("option");
    made.value = value;
    made.textContent = words;
    return made;
  }

  function nameOf(entry) {
    return entry.module + " " + entry.sensor;
  }

  function loopsOf(entry) {
    const loops = (window.campaignLoops || {})[entry.script];
    if (loops && loops.shared) {
      loops.traces = window.campaignUnfold(loops);
      loops.departures = loops.departures.map((place) => loops.lists[place]);
      delete loops.shared;
    }
    return loops;
  }

  function fetchLoops(entry, then) {
    if (loopsOf(entry)) {
      then();
      return;
    }
    const script = document.createElement("script");
    script.src = entry.script;
    script.addEventListener("load", then);
    script.addEventListener("error", () => campaign.announce("The loops of " + nameOf(entry) + " cannot be read"));
    document.head.append(script);
  }

  function fill(select, first, values) {
    const before = select.value;
    select.replaceChildren(...first, ...values.map((value) => option(String(value), String(value))));
    if ([...select.options].some((o) => o.value === before)) select.value = before;
  }

  function shown(trace, cycles) {
    const rate = rateList.value === EVERY || trace.meta.rate === rateList.value;
    const cycle = cycleList.value;
    if (cycle === EVERY) return rate;
    if (cycle === FEW) return rate && (trace.meta.cycle === cycles[0] || trace.meta.cycle === cycles[cycles.length - 1]);
    return rate && String(trace.meta.cycle) === cycle;
  }

  function draw() {
    const loops = loopsOf(current);
    if (!loops) {
      pick(current);
      return;
    }
    const wanted = (trace) => shown(trace, loops.cycles);
    const traces = loops.traces.filter(wanted);
    const less = loops.traces.map((trace, i) => Object.assign({}, trace, { y: loops.departures[i] })).filter(wanted);
    campaign.changeFigure("loops", traces, loops.ranges, current.csv);
    campaign.changeFigure("loop-departures", less, loops.departure_ranges, current.csv);
    campaign.announce(nameOf(current) + ": " + traces.length + " loops drawn");
  }

  function pick(entry) {
    current = entry;
    sensorList.value = entry.script;
    fetchLoops(entry, function () {
      if (current !== entry) return;
      const loops = loopsOf(entry);
      fill(rateList, [option(EVERY, "every rate")], loops.rates);
      fill(cycleList, [option(FEW, "first and last"), option(EVERY, "all drawn")], loops.cycles);
      draw();
    });
  }

  function follow() {
    const chosen = campaign.chosen();
    const entry = given.sensors.find((s) => s.module === chosen.module && (!chosen.sensor || s.sensor === chosen.sensor));
    if (entry && entry !== current && !(current.module === chosen.module && !chosen.sensor)) pick(entry);
  }

  const sensorList = list("Loops of", function () {
    const entry = given.sensors.find((s) => s.script === sensorList.value);
    pick(entry);
    if (given.sensors.length > 1) campaign.choose(entry.module, entry.sensor);
  });
  const rateList = list("at", draw);
  const cycleList = list("cycles", draw);
  place.classList.add("chooser");
  sensorList.append(...given.sensors.map((s) => option(s.script, nameOf(s))));
  sensorList.value = current.script;
  fill(rateList, [option(EVERY, "every rate")], []);
  fill(cycleList, [option(FEW, "first and last")], []);
  for (const select of [rateList, cycleList]) {
    select.addEventListener("focus", () => loopsOf(current) || pick(current), { once: true });
  }
  place.hidden = false;
  document.addEventListener("campaign-marks", follow);
  if (campaign.chosen().module) follow();
  fetchLoops(current, function () {
    const loops = loopsOf(current);
    fill(rateList, [option(EVERY, "every rate")], loops.rates);
    fill(cycleList, [option(FEW, "first and last"), option(EVERY, "all drawn")], loops.cycles);
  });
})(window.campaign);
