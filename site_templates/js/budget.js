/* Page 11: the budget of a chosen sensor under the conditions that a reader sets. It evaluates the coefficients
   of the page and nothing else; tests hold it to campaign/analyses/budget_model.py. */
"use strict";

(function (campaign) {
  const known = (value) => value !== null && value !== undefined && Number.isFinite(value);
  const orInfinite = (value) => (known(value) ? value : Infinity);

  /* --- Student's t, for any real degrees of freedom */

  function logGamma(x) {
    if (x < 12) return logGamma(x + 1) - Math.log(x);
    const y = 1 / (x * x);
    const series = (1 / 12 - y * (1 / 360 - y * (1 / 1260 - y * (1 / 1680 - y / 1188)))) / x;
    return (x - 0.5) * Math.log(x) - x + 0.5 * Math.log(2 * Math.PI) + series;
  }

  /* Regularised incomplete beta by its continued fraction (modified Lentz). */
  function incompleteBeta(x, a, b) {
    if (x <= 0) return 0;
    if (x >= 1) return 1;
    if (x > (a + 1) / (a + b + 2)) return 1 - incompleteBeta(1 - x, b, a);
    const tiny = 1e-300;
    const safe = (value) => (Math.abs(value) < tiny ? tiny : value);
    const front = Math.exp(logGamma(a + b) - logGamma(a) - logGamma(b) + a * Math.log(x) + b * Math.log1p(-x)) / a;
    let c = 1;
    let d = 1 / safe(1 - ((a + b) * x) / (a + 1));
    let sum = d;
    for (let m = 1; m < 500; m++) {
      const steps = [
        (m * (b - m) * x) / ((a + 2 * m - 1) * (a + 2 * m)),
        (-(a + m) * (a + b + m) * x) / ((a + 2 * m) * (a + 2 * m + 1)),
      ];
      let change = 1;
      for (const step of steps) {
        d = 1 / safe(1 + step * d);
        c = safe(1 + step / c);
        change = c * d;
        sum *= change;
      }
      if (Math.abs(change - 1) < 1e-15) break;
    }
    return front * sum;
  }

  /* Probability of |t| beyond a value. */
  const beyond = (t, degrees) => incompleteBeta(degrees / (degrees + t * t), degrees / 2, 0.5);

  /* Two-sided 95 % quantile of t; of the normal distribution for infinite degrees of freedom. */
  function coverageFactor(degrees) {
    if (!(degrees < 1e8)) return 1.959963984540054;
    let low = 1;
    let high = 2;
    while (beyond(high, degrees) > 0.05) high *= 2;
    for (let k = 0; k < 200 && high - low > 1e-13 * high; k++) {
      const middle = (low + high) / 2;
      if (beyond(middle, degrees) > 0.05) low = middle;
      else high = middle;
    }
    return (low + high) / 2;
  }

  /* --- the budget; sources are numbers into data.sources */

  const UNIFORM = Math.sqrt(3);

  /* What an influence of anything up to an amount gives: [known, unsure, degrees of freedom]. */
  const partsOf = (value, spread, degrees, amount) =>
    [[Math.abs(value) * amount / UNIFORM, Infinity], [Math.abs(spread) * amount / UNIFORM, orInfinite(degrees)]];

  function counted(parts) {
    return { status: "counted", lines: parts.filter((p) => p[0] > 0).map((p) => [p[0], p[1], 0, 0]) };
  }

  function ofTime(place, time) {
    if (time === 0) return { status: "not in use", lines: [] };
    if (!place.course) return { status: "unknown", lines: [] };
    if (!known(time)) return { status: "not in use", lines: [] };
    const [decade, decadeSpread, hour, hourSpread, degrees, start, farthest] = place.course;
    if (time > farthest) return { status: "unknown", lines: [], why: "the holds are too short to say it for that time" };
    const decades = Math.log10(Math.max(time / start, 1));
    const hours = Math.max(time - start, 0) / 3600;
    const spread = Math.hypot(decadeSpread * decades, hourSpread * hours);
    return counted(partsOf(decade * decades + hour * hours, spread, degrees, 1));
  }

  function ofInfluence(effect, amount, corrected) {
    if (amount === 0) return { status: "not in use", lines: [] };
    if (!effect) return { status: "unknown", lines: [] };
    if (!known(amount)) return { status: "not in use", lines: [] };
    const [value, spread, degrees, farthest, inside] = effect;
    if (amount > orInfinite(farthest)) return { status: "unknown", lines: [], why: "beyond what was measured" };
    const left = Math.sqrt(Math.max(amount * amount - 3 * (inside || 0), 0));
    if (left === 0) return { status: "contained", lines: [], why: "calibration runs held as much of it: inside run to run" };
    return counted(partsOf(corrected ? 0 : value, spread, degrees, left));
  }

  /* All sources of a subject at a place, by number: {status, lines: [contribution, degrees, group, two-point]}. */
  function sourcesOf(data, subject, place, use) {
    const number = (name) => data.sources.indexOf(name);
    const [lines, contained, unknown] = place.fixed[use.direction] || place.fixed.unknown;
    const found = {};
    for (const [source, contribution, degrees, group, two] of lines) {
      found[source] = found[source] || { status: "counted", lines: [] };
      found[source].lines.push([contribution, orInfinite(degrees), group, two]);
    }
    for (const [status, reasons] of [["contained", contained], ["unknown", unknown]])
      for (const [source, why] of Object.entries(reasons))
        if (!found[source]) found[source] = { status: status, lines: [], why: why };
        else if (status === "unknown") Object.assign(found[source], { incomplete: true, why: why });
        else if (!found[source].why) found[source].why = why;
    found[number("drift or creep")] = ofTime(place, use.time_s);
    found[number("pressure")] = ofInfluence(place.effects.pressure, use.pressure_kpa, use.corrected);
    const half = known(use.range_k) ? use.range_k / 2 : null;
    found[number("temperature")] = ofInfluence(place.effects.temperature, half, false);
    found[number("cross-axis")] = ofInfluence(place.effects.across, use.across, false);
    for (const [source, own] of Object.entries(found)) {
      if (own.why) continue;
      if (own.status === "unknown" && source in place.missing) own.why = place.missing[source];
      if (own.status === "not in use") own.why = "none in these conditions";
    }
    if (known(use.rate)) byRate(subject, use, found, number);
    return found;
  }

  function byRate(subject, use, found, number) {
    const [half, rate] = subject.loop;
    const ratio = use.rate / rate;
    if (!known(rate) || !(ratio >= 1 / 3 && ratio <= 3)) {
      found[number("rate of stretch")] = { status: "unknown", lines: [], why: "no loops were run at about that rate" };
      return;
    }
    found[number("rate of stretch")] = { status: "contained", lines: [], why: "the loops were run at about that rate" };
    if (use.direction !== "unknown") return;
    const loop = number("hysteresis");
    const others = found[loop] ? found[loop].lines.filter((line) => !line[3]) : [];
    found[loop] = { status: "counted", lines: [[half, Infinity, 0, 1]].concat(others) };
  }

  function combine(found) {
    const groups = {};
    let alone = 0;
    for (const own of Object.values(found)) {
      for (const [contribution, degrees, group] of own.lines) {
        const name = group ? "g" + group : "l" + alone++;
        const before = groups[name] || { variance: 0, degrees: degrees };
        groups[name] = {
          variance: before.variance + contribution * contribution,
          degrees: Math.min(before.degrees, degrees),
        };
      }
    }
    const parts = Object.values(groups);
    const variance = parts.reduce((sum, part) => sum + part.variance, 0);
    const spent = parts.reduce((sum, part) => sum + (part.variance * part.variance) / part.degrees, 0);
    const degrees = spent > 0 ? (variance * variance) / spent : Infinity;
    const factor = coverageFactor(degrees);
    return { u: Math.sqrt(variance), degrees: degrees, k: factor, U: factor * Math.sqrt(variance) };
  }

  function budgetAt(data, subject, place, use) {
    const found = sourcesOf(data, subject, place, use);
    const missing = data.sources.filter((_, n) => found[n] && (found[n].status === "unknown" || found[n].incomplete));
    return Object.assign(combine(found), { place: place, sources: found, missing: missing });
  }

  /* At the named place, or where U is largest. */
  function budgetOf(data, subject, use, name) {
    const all = subject.places.map((place) => budgetAt(data, subject, place, use));
    const wanted = all.find((one) => one.place.name === name);
    return wanted || all.reduce((worst, one) => (one.U > worst.U ? one : worst));
  }

  window.campaignBudget = { budgetOf: budgetOf, coverageFactor: coverageFactor };

  /* --- the controls */

  const form = document.querySelector("[data-budget]");
  const data = ((window.campaignPage || {}).values || {}).budget;
  if (!form || !data) return;
  const part = (name) => form.querySelector("[data-part='" + name + "']");

  function digits(value, number) {
    if (!Number.isFinite(value)) return value > 0 ? "\u221e" : "not known";
    if (value === 0) return "0";
    const place = Math.floor(Math.log10(Math.abs(Number(value.toPrecision(number))))) - number + 1;
    return Number(value.toPrecision(number)).toFixed(Math.max(0, -place));
  }

  /* An empty field is a condition that is not stated. */
  function amount(name, scale) {
    const text = part(name).value.trim().replace(",", ".");
    const value = parseFloat(text);
    return text === "" || !(value >= 0) ? null : value * scale;
  }

  function conditions() {
    return {
      direction: part("direction").value,
      time_s: amount("time", 3600),
      pressure_kpa: amount("pressure", 1),
      corrected: part("corrected").checked,
      range_k: amount("range", 1),
      across: amount("across", 0.01),
      rate: data.conditions.rate,
    };
  }

  /* Coefficients of a sensor stand in its module's script, fetched when they are asked for. */
  function coefficients(entry) {
    if (entry.own) return entry.own;
    const module = (window.campaignBudgets || {})[entry.script];
    return module && Object.hasOwn(module, entry.sensor) ? module[entry.sensor] : undefined;
  }

  function fetchThen(entry, then) {
    if (coefficients(entry)) {
      then();
      return;
    }
    const script = document.createElement("script");
    script.src = entry.script;
    script.addEventListener("load", then);
    script.addEventListener("error", () => campaign.announce("The budget of " + entry.name + " cannot be read"));
    document.head.append(script);
  }

  const current = () => data.subjects[Number(part("subject").value)];

  function row(source, own, variance) {
    const line = document.createElement("tr");
    const contribution = Math.sqrt(own.lines.reduce((sum, l) => sum + l[0] * l[0], 0));
    const name = document.createElement("th");
    name.scope = "row";
    const link = document.createElement("a");
    link.href = part("links").querySelector("[data-source='" + data.sources[source] + "']").href;
    link.textContent = data.sources[source];
    name.append(link);
    const counts = own.status === "counted";
    const size = counts ? digits(contribution * data.factor, 2) : own.status === "unknown" ? "unknown" : "\u2013";
    const share = counts ? digits((100 * contribution * contribution) / variance, 2) : "\u2013";
    line.append(name);
    for (const text of [size, share, own.why || ""]) {
      const cell = document.createElement("td");
      cell.textContent = text;
      line.append(cell);
    }
    return line;
  }

  function update() {
    const entry = current();
    fetchThen(entry, () => current() === entry && show(coefficients(entry)));
  }

  function show(subject) {
    const found = budgetOf(data, subject, conditions(), part("place").value);
    const rows = Object.keys(found.sources).map(Number).sort((a, b) => a - b);
    const least = found.missing.length ? "at least " : "";
    part("u").textContent = "U = " + least + digits(found.U * data.factor, 2) + "\u202f" + data.unit;
    part("detail").textContent =
      "95\u00a0%, k\u00a0=\u00a0" + digits(found.k, 3) + ", " + digits(found.degrees, 2) +
      " effective degrees of freedom, at " + digits(found.place.x * data.factor, 3) + "\u202f" + data.unit +
      (found.missing.length ? "; not known: " + found.missing.join(", ") : "");
    part("rows").replaceChildren(...rows.map((source) => row(source, found.sources[source], found.u * found.u)));
  }

  function follow() {
    const chosen = campaign && campaign.chosen ? campaign.chosen() : {};
    const number = data.subjects.findIndex((s) => s.sensor && s.module === chosen.module && s.sensor === chosen.sensor);
    if (number >= 0) part("subject").value = String(number);
    update();
  }

  form.hidden = false;
  for (const kind of ["input", "change"]) form.addEventListener(kind, update);
  form.addEventListener("submit", (event) => event.preventDefault());
  document.addEventListener("campaign-marks", follow);
  follow();
})(window.campaign || {});
