"use strict";
/* The calculator of a sensor's page: a signal in, strain and length out, with a 95 % interval.
   It evaluates the calibration record and nothing else; tests hold it to campaign/methods/inverse_reading.py. */
(function () {
  /* Variance of a mean of m readings in one new run, split by powers of x. A part that is unknown (null) is NaN. */
  function variances(record, m) {
    const known = (value) => (value === null || value === undefined ? NaN : value);
    const own = known(record.direction_half_width);
    return {
      constant:
        known(record.var_intercept) + known(record.run_var_intercept) + known(record.lack_of_fit_variance) +
        own * own + known(record.residual_variance) / m,
      linear: known(record.cov_intercept_slope) + known(record.run_cov),
      square: known(record.var_slope) + known(record.run_var_slope),
    };
  }

  function inverseReading(record, signal, m) {
    if (!Number.isFinite(signal)) return { status: "no signal" };
    if (signal < record.signal_low || signal > record.signal_high) return { status: "outside calibration" };
    const rise = signal - record.intercept;
    const x = rise / record.slope;
    const t2 = record.t_quantile_975 === null ? NaN : record.t_quantile_975 * record.t_quantile_975;
    const v = variances(record, m);
    const a = record.slope * record.slope - t2 * v.square;
    const b = record.slope * rise + t2 * v.linear;
    const c = rise * rise - t2 * v.constant;
    const root = b * b - a * c;
    if (!(a > 0) || !(root >= 0)) return { status: "no interval", x: x };
    const reach = Math.sqrt(root);
    return { status: "inside calibration", x: x, low: (b - reach) / a, high: (b + reach) / a };
  }

  window.campaignCalculator = { inverseReading: inverseReading };

  const place = document.querySelector("[data-calculator]");
  const given = window.campaignPage && window.campaignPage.values && window.campaignPage.values.calculator;
  if (!place || !given || !given.records.length) return;
  const part = (name) => place.querySelector("[data-part='" + name + "']");
  const input = part("signal");
  const number = part("readings");
  const branch = part("branch");

  /* Two digits of the half-width, as everywhere in the report. */
  function rounded(values, halfWidth) {
    const digits = halfWidth > 0 ? Math.max(0, Math.min(12, 1 - Math.floor(Math.log10(halfWidth)))) : 6;
    return values.map((value) => value.toFixed(digits).replace("-", "\u2212"));
  }

  function intervalText(values, unit) {
    const half = (values[2] - values[1]) / 2;
    const texts = rounded(values, half);
    return texts[0] + " [" + texts[1] + ", " + texts[2] + "]\u202f" + unit;
  }

  function show(name, text) {
    const target = part(name);
    if (target) target.textContent = text;
  }

  function answerIn(record, answer) {
    const factor = record.reference_name === "strain" ? 100 : 1;
    const unit = record.reference_name === "strain" ? "%" : "mm";
    return intervalText([answer.x * factor, answer.low * factor, answer.high * factor], unit);
  }

  function words(record, answer) {
    if (answer.status === "no signal") return "—";
    if (answer.status !== "inside calibration") return answer.status;
    return answerIn(record, answer);
  }

  /* Lengths have a line of their own, in which the rest length cancels. */
  function lengthWords(record, signal, m) {
    const line = record.length_line;
    if (!line || line.slope === undefined) return "rest length not known";
    const answer = inverseReading(Object.assign({}, record, line), signal, m);
    return words({ reference_name: "length" }, answer);
  }

  /* Five digits, rounded inwards: a signal typed as it stands here is inside the calibration. */
  function end(value, round) {
    const unit = Math.pow(10, Math.floor(Math.log10(Math.abs(value) || 1)) - 4);
    return (round(value / unit) * unit).toPrecision(5);
  }

  function update() {
    const record = given.records.find((r) => r.branch === branch.value) || given.records[0];
    const signal = parseFloat(input.value.trim().replace(",", ".").replace("\u2212", "-"));
    const m = Math.max(1, Math.floor(Number(number.value) || 1));
    for (const [name, readings] of [["one", 1], ["mean", m]]) {
      const answer = inverseReading(record, signal, readings);
      show(name + "-x", words(record, answer));
      show(name + "-length", lengthWords(record, signal, readings));
    }
    show("range", end(record.signal_low, Math.ceil) + " to " + end(record.signal_high, Math.floor) + "\u202f" + record.unit);
  }

  place.hidden = false;
  for (const control of [input, number, branch]) control.addEventListener("input", update);
  update();
})();
