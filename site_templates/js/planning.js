"use strict";
/* Page 10: what a planned campaign would resolve. The same sums as campaign/methods/campaign_design.py, from the
   components, quantiles and powers that the page carries; tests hold the two together. */
(function () {
  const STRATA = ["module", "sensor", "sensor_run", "module_mounting", "module_run", "sensor_mounting"];

  /* What each component is multiplied by in the variance of a generation's mean. */
  function weights(design) {
    const m = design.modules, s = design.sensors, q = design.sessions, runs = q * design.repetitions;
    return {
      module: 1 / m, sensor: 1 / (m * s), sensor_run: 1 / (m * s * runs),
      module_mounting: 1 / (m * q), module_run: 1 / (m * runs), sensor_mounting: 1 / (m * s * q),
    };
  }

  /* Variance of a difference of two means with its limits (null where a component has none). */
  function variance(components, design) {
    const w = weights(design);
    let total = 0, below = 0, above = 0;
    for (const name of STRATA) {
      const estimate = 2 * w[name] * components.variances[name];
      const ends = (components.limits || {})[name] || [null, null];
      if (!(estimate > 0) && !(ends[1] > 0)) continue;
      total += estimate;
      below += Math.pow(estimate - (ends[0] === null ? NaN : 2 * w[name] * ends[0]), 2);
      above += Math.pow((ends[1] === null ? NaN : 2 * w[name] * ends[1]) - estimate, 2);
    }
    return { estimate: total, low: Math.max(total - Math.sqrt(below), 0), high: total + Math.sqrt(above) };
  }

  function halfWidth(data, value, modules) {
    return data.quantiles[modules - 2] * Math.sqrt(value);
  }

  /* Power by straight lines between the noncentralities of the grid. */
  function power(data, difference, value, modules) {
    const row = data.powers[modules - 2];
    const place = Math.abs(difference) / Math.sqrt(value) / data.power_step;
    if (!(place < row.length - 1)) return place >= row.length - 1 ? 1 : NaN;
    const index = Math.floor(place);
    return row[index] + (place - index) * (row[index + 1] - row[index]);
  }

  function cost(costs, design) {
    const runs = design.sessions * design.repetitions;
    return 2 * design.modules * (costs.module + design.sensors * (costs.sensor + runs * costs.repetition));
  }

  /* All whole-numbered designs within reach: the first by the order that is asked for. */
  function search(data, components, costs, sessions, keeps, order) {
    let found = null;
    for (let modules = 2; modules <= data.reach.modules; modules += 1) {
      for (let sensors = 1; sensors <= data.reach.sensors; sensors += 1) {
        for (let repetitions = 1; repetitions <= data.reach.repetitions; repetitions += 1) {
          const design = { modules: modules, sensors: sensors, repetitions: repetitions, sessions: sessions };
          const one = {
            design: design, cost: cost(costs, design),
            width: halfWidth(data, variance(components, design).estimate, modules),
          };
          if (keeps(one) && (found === null || order(one, found) < 0)) found = one;
        }
      }
    }
    return found;
  }

  function cheapest(data, components, costs, target, sessions) {
    return search(data, components, costs, sessions, (one) => one.width <= target,
      (a, b) => a.cost - b.cost || a.width - b.width);
  }

  function best(data, components, costs, budget, sessions) {
    return search(data, components, costs, sessions, (one) => one.cost <= budget * (1 + 1e-12),
      (a, b) => a.width - b.width || a.cost - b.cost);
  }

  window.campaignPlanning = {
    variance: variance, halfWidth: halfWidth, power: power, cost: cost, cheapest: cheapest, best: best,
  };

  const place = document.querySelector("[data-planning]");
  const data = ((window.campaignPage || {}).values || {}).planning;
  if (!place || !data) return;
  const part = (name) => place.querySelector("[data-part='" + name + "']");
  const NARROW = "\u202f";

  function digits(value, count) {
    if (!Number.isFinite(value)) return "not known";
    const places = value === 0 ? 0 : Math.max(0, count - 1 - Math.floor(Math.log10(Math.abs(value))));
    return value.toFixed(Math.min(places, 12)).replace("-", "\u2212");
  }

  function number(name, least) {
    const value = parseFloat(part(name).value.trim().replace(",", "."));
    return Number.isFinite(value) ? Math.max(value, least) : NaN;
  }

  function whole(name, least, most) {
    return Math.min(Math.max(Math.round(number(name, least)) || least, least), most);
  }

  function say(name, text) {
    part(name).textContent = text;
  }

  function share(value) {
    return Number.isFinite(value) ? digits(100 * value, 2) + NARROW + "%" : "not known";
  }

  function words(found) {
    if (found === null) return "none within reach";
    const d = found.design;
    const width = digits(found.width * data.factor, 2) + NARROW + data.unit;
    return d.modules + " modules a generation, " + d.sensors + " sensors each, " + d.sessions + " × " +
      d.repetitions + " runs: ±" + width + " for " + digits(found.cost, 3);
  }

  function prices() {
    const costs = { module: number("cost-module", 0), sensor: number("cost-sensor", 0), repetition: number("cost-repetition", 0) };
    return Object.values(costs).every(Number.isFinite) ? costs : null;
  }

  function update() {
    const components = data.components[Number(part("components").value)] || data.components[0];
    const design = {
      modules: whole("modules", 2, data.quantiles.length + 1), sensors: whole("sensors", 1, 99),
      sessions: whole("sessions", 1, 99), repetitions: whole("repetitions", 1, 99),
    };
    const value = variance(components, design);
    const difference = number("difference", 0) / data.factor;
    const widths = [value.estimate, value.low, value.high].map((v) => halfWidth(data, v, design.modules) * data.factor);
    const ends = Number.isFinite(widths[1]) && Number.isFinite(widths[2]);
    say("half-width", "±" + digits(widths[0], 2) + NARROW + data.unit +
      (ends ? " (±" + digits(widths[1], 2) + " to ±" + digits(widths[2], 2) + " as components go)" : ""));
    const powers = [value.estimate, value.high, value.low].map((v) => power(data, difference, v, design.modules));
    say("power", share(powers[0]) + (ends ? " (" + share(powers[1]) + " to " + share(powers[2]) + " as components go)" : ""));
    const factors = data.sd_factors[design.modules - 2];
    say("sd", "×" + digits(factors[0], 2) + " to ×" + digits(factors[1], 2));
    const costs = prices();
    if (costs === null) {
      for (const name of ["cost", "cheapest", "best"]) say(name, "state all three costs");
      return;
    }
    const spent = cost(costs, design);
    say("cost", digits(spent, 3));
    say("cheapest", difference > 0 ? words(cheapest(data, components, costs, difference, design.sessions)) : "state a difference");
    say("best", words(best(data, components, costs, spent, design.sessions)));
  }

  place.hidden = false;
  for (const kind of ["input", "change"]) place.addEventListener(kind, update);
  update();
})();
