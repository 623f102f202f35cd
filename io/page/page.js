"use strict";
// Joins the data, the trial and the charts: what the reader does, and what follows from it.

const modesieve = (() => {
  const data = JSON.parse(document.getElementById("data").textContent);
  const trial = Trial.create(data), { omega, p, m } = trial, TWO_PI = 2 * Math.PI, SIEVE_FLOOR = 1e-6;
  const C = Charts, $ = (id) => document.getElementById(id), thermal = data.kind === "thermal";
  const el = (tag, text, props = {}) => Object.assign(document.createElement(tag), { textContent: text ?? "" }, props);
  const state = { pair: null, measure: data.by, level: null, pins: new Map(), rate: 0, errorKind: "local", countView: "band", sort: { key: "number", up: true }, focus: 1, result: null };

  // ---- axes: hertz for structures, period for thermal ----------------------------------------------------------------
  const seconds = omega[Math.floor(omega.length / 2)] > 0 ? TWO_PI / omega[Math.floor(omega.length / 2)] : 1;
  const [tick, tickUnit] = seconds > 3600 ? [3600, "h"] : seconds > 120 ? [60, "min"] : [1, "s"];
  const toX = (w) => (thermal ? TWO_PI / w / tick : w / TWO_PI);
  const xTitle = thermal ? `period, ${tickUnit}` : "frequency, Hz";
  const xs = Array.from(omega, toX), bandX = data.band.map((w) => toX(Math.max(w, omega[0])));
  const grainX = (row) => (thermal ? (row.tau === null ? null : row.tau / tick) : row.hz > 0 ? row.hz : null);

  // ---- kept set: sieve line, pins, ticks ------------------------------------------------------------------------------
  const byNumber = new Map(data.modes.map((r) => [r.number, r]));
  const measureOf = (r) => r.measures[state.measure];
  const largest = () => Math.max(...data.modes.map((r) => measureOf(r) ?? 0).filter(Number.isFinite)) || 1;
  const share = (r) => { const v = measureOf(r); return v === null ? (state.measure === "decay" ? 1 : 0) : v / largest(); };
  const order = () => (state.measure === data.by ? data.order.map((n) => byNumber.get(n)) : [...data.modes].sort((a, b) => (b.always ? 2 : share(b)) - (a.always ? 2 : share(a)) || a.number - b.number));

  function levelFor(count) {
    const list = order(), above = list[count - 1], below = list[count], low = below ? share(below) : 0, high = above ? Math.min(share(above), 1) : 1.5;
    if (!above) return 1.5;
    return low > 0 && low < high ? Math.sqrt(low * high) : high * 0.93;
  }
  function sift() {
    const numbers = data.modes.filter((r) => (state.pins.has(r.number) ? state.pins.get(r.number) : share(r) >= state.level)).map((r) => r.number);
    trial.set(numbers);
    refresh();
  }
  function moveLine(level) { state.level = level; sift(); }
  function moveCount(by) {
    const count = Math.max(trial.always.size, Math.min(data.modes.length, trial.kept().size + by));
    state.pins.clear();
    state.level = levelFor(count);
    trial.set(order().slice(0, count).map((r) => r.number));
    refresh();
  }
  function toggle(number) {
    if (trial.always.has(number)) return;
    const keep = !trial.kept().has(number), term = byNumber.get(number).term;
    for (const r of data.modes) if (r.term === term) state.pins.set(r.number, keep);
    const numbers = new Set(trial.kept());
    for (const r of data.modes) if (r.term === term) keep ? numbers.add(r.number) : numbers.delete(r.number);
    trial.set(numbers);
    refresh();
  }
  function deliver() {
    state.pins.clear();
    trial.set(data.delivered.kept);
    state.level = levelFor(data.delivered.kept.length);
    for (const r of data.modes) if (trial.kept().has(r.number) !== share(r) >= state.level) state.pins.set(r.number, trial.kept().has(r.number));
    refresh();
  }

  // ---- words ------------------------------------------------------------------------------------------------------------
  const smallName = () => (trial.isDelivered() ? "delivered" : "trying");
  const smallColor = (c) => (trial.isDelivered() ? c.blue : c.vermilion);
  const pairName = () => (state.pair === null ? "largest singular value, weighted" : `${data.outputs[Math.floor(state.pair / m)].name} from ${data.inputs[state.pair % m].name}`);
  const at = (w) => (thermal ? `period ${C.engineering(TWO_PI / w / tick, tickUnit)}` : C.engineering(w / TWO_PI, "Hz"));
  const bandWords = () => (thermal ? `periods ${C.engineering(bandX[1], tickUnit)} to ${C.engineering(bandX[0], tickUnit)}` : `${C.engineering(data.band[0] / TWO_PI, "Hz")} to ${C.engineering(data.band[1] / TWO_PI, "Hz")}`);

  function header() {
    const v = data.verdict;
    $("headline").textContent = v.headline; $("sentence").textContent = v.sentence; $("about").textContent = v.about;
    $("cautions").replaceChildren(...v.cautions.map((text) => el("li", text)));
  }
  function banner() {
    const r = state.result, delivered = trial.isDelivered();
    $("banner").classList.toggle("trying", !delivered);
    $("banner-state").textContent = delivered ? "Delivered" : "Trying";
    const own = `${r.kept} of ${data.modes.length} modes, ${r.states} states: worst error in the band ${C.percent(r.localWorst.value)} local, ${C.percent(r.peak.value)} of the peak, measured`;
    const bound = r.guaranteed ? `; guaranteed at most ${C.percent(guaranteedWorst(r))} of the peak at every sample` : "";
    $("banner-text").textContent = delivered ? `the small model as the file holds it: ${own}${bound}.` : `not in any file: ${own}${bound}.`;
    $("back").disabled = delivered;
  }
  const guaranteedWorst = (r) => r.guaranteed.sigma.reduce((top, v, w) => (data.in_band[w] && v > top ? v : top), 0) / trial.peak;

  // ---- charts -----------------------------------------------------------------------------------------------------------
  function drawSieve() {
    const bottom = SIEVE_FLOOR, xsAll = data.modes.map(grainX).filter((x) => x !== null), edge = data.counted_to === null ? null : thermal ? 1 / data.counted_to / tick : data.counted_to / TWO_PI;
    const inside = [...xsAll, ...bandX.filter(Number.isFinite), ...(edge ? [edge] : [])].filter((x) => x > 0);
    const lo = Math.min(...inside) / 1.35, hi = Math.max(...inside) * 1.35;
    const grains = data.modes.filter((r) => r.number === Math.min(...(r.cluster.length ? r.cluster.filter((n) => byNumber.get(n).term === r.term) : [r.number]))).map((r) => ({
      number: r.number, x: r.always ? null : grainX(r) ?? null, y: Math.max(Math.min(share(r), 1), bottom), kept: trial.kept().has(r.number), pinned: state.pins.has(r.number),
      label: r.always ? r.always : r.cluster.length > 1 ? String(r.cluster.length) : "", hover: grainWords(r) }));
    C.sieve("sieve-chart", { grains, level: Math.max(state.level, bottom), band: thermal ? bandX : [Math.max(bandX[0], lo), bandX[1]], edge, xRange: thermal ? [hi, lo] : [lo, hi], yRange: [bottom / 1.5, 2.2],
      xTitle: thermal ? `time constant, ${tickUnit} (slow to fast)` : "frequency, Hz", yTitle: `${state.measure}, share of the largest` });
    placeLine();
    const line = $("sieve-line");
    line.setAttribute("aria-valuemax", data.modes.length); line.setAttribute("aria-valuenow", trial.kept().size);
    line.setAttribute("aria-valuetext", `${trial.kept().size} of ${data.modes.length} modes kept`);
  }
  const grainWords = (r) => [`mode ${r.number}${r.cluster.length > 1 ? ` of cluster ${r.cluster.join("-")}` : ""}`, thermal ? `time constant ${C.engineering(r.tau, "s")}` : C.engineering(r.hz, "Hz"),
    `${state.measure} ${C.percent(share(r))}`, r.always || (trial.kept().has(r.number) ? "kept" : "dropped")].join(", ");

  const RATES = [["as given", 0], ["mobility (times jω)", 1], ["accelerance (times −ω²)", 2]];
  function curve(z, e) { return Array.from(omega, (w, i) => Math.hypot(z.re[i * p * m + e], z.im[i * p * m + e]) * w ** state.rate); }
  function phase(z, e) { return Array.from(omega, (_, i) => (Math.atan2(z.im[i * p * m + e], z.re[i * p * m + e]) * 180) / Math.PI + 90 * state.rate).map((a) => ((a + 180 + 720) % 360) - 180); }
  function drawResponse() {
    const r = state.result, e = state.pair, one = e !== null, full = one ? curve(trial.full, e) : Array.from(trial.sigmaFull, (v, w) => v * omega[w] ** state.rate);
    const small = one ? curve(r.R, e) : Array.from(sigmaSmall(), (v, w) => v * omega[w] ** state.rate);
    const unit = one ? ratioUnit(e) : "weighted";
    const marks = data.modes.filter((q) => q.hz && q.hz * TWO_PI >= omega[0] && q.hz * TWO_PI <= omega[omega.length - 1]).map((q) => {
      const w = omega.findIndex((o) => o >= q.hz * TWO_PI);
      return { x: toX(q.hz * TWO_PI), y: full[w] * 1.35, text: grainWords(q), kept: trial.kept().has(q.number) };
    });
    $("response-title").textContent = `Response: ${pairName()}`;
    C.response("response-chart", { x: xs, full, small, fullPhase: one ? phase(trial.full, e) : null, smallPhase: one ? phase(r.R, e) : null, unit, xUnit: thermal ? tickUnit : "Hz", xTitle, yTitle: one ? `${C.plain(pairName())}${unit ? `, ${C.plain(unit)}` : ""}` : "largest singular value, weighted",
      name: smallName(), color: smallColor, band: bandX, reversed: thermal, marks });
  }
  const ratioUnit = (e) => {
    const out = data.outputs[Math.floor(e / m)].unit, inp = data.inputs[e % m].unit;
    return (out || inp) ? `${out || "1"}${["", "/s", "/s²"][state.rate]}${inp ? ` per ${inp}` : ""}` : "";
  };
  const scaleOf = () => Numbers.array(data.scale);
  const sigmaSmall = () => Numbers.largestSingular(state.result.R, scaleOf(), omega.length, p, m);

  const ERROR_KINDS = { local: "share of the full response there", peak: "share of the band's peak", phase: "phase error, °" };
  function drawError() {
    const r = state.result, e = state.pair, kind = state.errorKind, pairs = p * m, scale = scaleOf();
    const size = e === null ? Array.from(r.sigma) : Array.from(omega, (_, w) => Math.hypot(r.error.re[w * pairs + e], r.error.im[w * pairs + e]) * scale[e]);
    const full = e === null ? Array.from(trial.sigmaFull) : Array.from(omega, (_, w) => Math.hypot(trial.full.re[w * pairs + e], trial.full.im[w * pairs + e]) * scale[e]);
    const peak = e === null ? trial.peak : Math.max(...full.filter((_, w) => data.in_band[w])) || 1;
    const over = (v, w) => (kind === "peak" ? v / peak : v / Math.max(full[w], data.threshold));
    let measured = size.map(over), bound = null;
    if (r.guaranteed && kind !== "phase") bound = (e === null ? Array.from(r.guaranteed.sigma) : Array.from(omega, (_, w) => r.guaranteed.perPair[w * pairs + e])).map(over);
    if (kind === "phase") measured = e === null ? worstPhase() : phaseGap(e);
    const positive = [...measured, ...(bound || [])].filter((v) => v > 0 && Number.isFinite(v)), low = Math.min(...positive), high = Math.max(...positive);
    const spots = (data.spot_checks || []).map((s) => ({ x: toX(s.omega), y: over(s.error, Math.max(0, omega.findIndex((o) => o >= s.omega))) }));
    C.error("error-chart", { x: xs, measured, guaranteed: bound, spots: trial.isDelivered() && e === null && kind !== "phase" ? spots : [], linear: kind === "phase", tolerance: data.tolerance && data.tolerance.of === kind ? data.tolerance.value : null, band: bandX, xTitle, yTitle: ERROR_KINDS[kind],
      reversed: thermal, range: positive.length ? [Math.log10(Math.max(low, high * 1e-8)) - 0.2, Math.log10(high) + 0.3] : null });
  }
  const turn = (a) => ((a + 540) % 360) - 180;
  const phaseGap = (e) => { const saved = state.rate; state.rate = 0; const a = phase(trial.full, e), b = phase(state.result.R, e); state.rate = saved; return a.map((v, i) => Math.abs(turn(b[i] - v + 360))); };
  const worstPhase = () => { const all = Array.from({ length: p * m }, (_, e) => phaseGap(e)); return Array.from(omega, (_, w) => Math.max(...all.map((list) => list[w]))); };

  function drawCount() {
    const s = data.sweep;
    if (!s) { $("count").classList.add("hidden"); return; }
    if (state.countView === "axis") { drawAxis(); return; }
    $("count-note").textContent = `in the order of ${s.by}`;
    C.count("count-chart", { curves: s.curves, floor: null, now: trial.kept().size, tolerance: data.tolerance && data.tolerance.of === s.of ? data.tolerance.value : null, xTitle: "kept modes", yTitle: `worst error, ${ERROR_KINDS[s.of] ? s.of : "absolute"}` });
  }
  // The whole-axis error over the number of states, and only there the floor.
  function drawAxis() {
    const a = data.axis;
    $("count-note").textContent = "weighted error, all frequencies";
    C.count("count-chart", { curves: [{ name: "whole axis", certainty: "guaranteed", x: a.states, y: a.error }], floor: { x: a.states, y: a.floor.map((v) => v || null) }, now: state.result.states, tolerance: null, xTitle: "states", yTitle: "worst error, weighted" });
  }
  function drawTime() {
    if (!data.step) { $("time").classList.add("hidden"); return; }
    const e = state.pair ?? worstPair(), row = Math.floor(e / m), col = e % m, t = Numbers.array(data.step.t), all = Numbers.array(data.step.full), bound = Numbers.array(data.step.bound);
    const [f, unit] = t[t.length - 1] > 7200 ? [3600, "h"] : t[t.length - 1] > 300 ? [60, "min"] : [1, "s"], small = Array.from(trial.step(row, col, t));
    $("time-note").textContent = `${data.outputs[row].name} after a step of ${data.inputs[col].name}, ${C.engineering(data.amplitudes[col], data.inputs[col].unit)}`;
    C.time("time-chart", { t: Array.from(t, (v) => v / f), tUnit: unit, full: Array.from(t, (_, i) => all[i * p * m + e]), small, certainty: data.step.certainty, name: smallName(), color: smallColor,
      unit: data.outputs[row].unit, yTitle: `${C.plain(data.outputs[row].name)}${data.outputs[row].unit ? `, ${C.plain(data.outputs[row].unit)}` : ""}`, band: trial.isDelivered() && data.step.bound ? Array.from(t, (_, i) => bound[i * p * m + e]) : null });
  }
  const worstPair = () => state.result.pairs.reduce((top, o, e, list) => (o.share > list[top].share && Number.isFinite(o.share) ? e : top), 0);

  function drawPoles() {
    const points = data.modes.filter((r) => r.re !== undefined).map((r) => ({ number: r.number, kept: trial.kept().has(r.number), text: grainWords(r), x: thermal ? r.number : r.re, y: thermal ? -r.re : r.im / TWO_PI }));
    C.poles("poles-chart", { points, xTitle: thermal ? "mode number" : "real part, 1/s", yTitle: thermal ? "decay rate, 1/s" : "imaginary part over 2π, Hz", logX: false, logY: thermal });
  }
  function drawCoupling() {
    const rows = data.coupling;
    C.coupling("coupling-chart", { rows: data.modes.map((r) => String(r.number)), columns: [...data.inputs.map((i) => `in: ${i.name}`), ...data.outputs.map((o) => `out: ${o.name}`)],
      share: rows, z: rows.map((line) => line.map((v) => Math.max(-3, Math.log10(Math.max(v, 1e-12))))) });
  }

  // ---- tables -----------------------------------------------------------------------------------------------------------
  function buildPairs() {
    const head = el("tr"); head.append(el("th", "output \\ input"), ...data.inputs.map((i) => el("th", i.name, { scope: "col", title: i.name })));
    const all = el("tr"), cell = el("td", "", { colSpan: m }), button = el("button", "all pairs: largest singular value", { type: "button" });
    button.dataset.pair = "all"; cell.append(button); all.append(el("th", "", { scope: "row" }), cell);
    const rows = data.outputs.map((o, row) => {
      const line = el("tr"); line.append(el("th", o.name, { scope: "row", title: o.name }));
      for (let col = 0; col < m; col++) { const td = el("td"), b = el("button", "", { type: "button" }); b.dataset.pair = row * m + col; td.append(b); line.append(td); }
      return line;
    });
    $("pairs-table").tHead.replaceChildren(head); $("pairs-table").tBodies[0].replaceChildren(...rows, all);
    $("pairs-table").addEventListener("click", (event) => { const b = event.target.closest("button"); if (b) choosePair(b.dataset.pair === "all" ? null : Number(b.dataset.pair)); });
  }
  function fillPairs() {
    const list = state.result.pairs, shares = list.map((o) => o.share).filter(Number.isFinite).sort((a, b) => a - b), middle = shares[Math.floor(shares.length / 2)] || 0, top = shares[shares.length - 1];
    for (const b of $("pairs-table").querySelectorAll("button")) {
      const all = b.dataset.pair === "all", e = Number(b.dataset.pair);
      b.setAttribute("aria-pressed", String(all ? state.pair === null : state.pair === e));
      if (all) continue;
      const unit = data.outputs[Math.floor(e / m)].unit, size = list[e].value * data.amplitudes[e % m];
      b.textContent = `${C.engineering(size, unit)}  ${Number.isFinite(list[e].share) ? C.percent(list[e].share) : "–"}`;
      b.setAttribute("aria-label", `${data.outputs[Math.floor(e / m)].name} from ${data.inputs[e % m].name}: worst error ${C.engineering(size, unit)}, ${C.percent(list[e].share)}, at ${at(list[e].omega)}`);
      b.title = Number.isFinite(list[e].share) ? `worst at ${at(list[e].omega)}` : "never above the threshold";
      b.parentElement.classList.toggle("bad", list.length > 1 && list[e].share === top && top > Math.max(3 * middle, 1e-9));
    }
  }
  const COLUMNS = () => [["keep", "keep"], ["number", "mode"], [thermal ? "tau" : "hz", thermal ? `time constant, ${tickUnit}` : "frequency, Hz"], ...(thermal ? [] : [["zeta", "damping, %"]]), ["cluster", "cluster"],
    ...data.measure_names.map((name) => [`m:${name}`, name]), ["residual", "residual"], ["condition", "condition"]];
  function valueOf(r, key) {
    if (key === "keep") return trial.kept().has(r.number) ? 1 : 0;
    if (key === "cluster") return r.cluster[0] ?? 0;
    return key.startsWith("m:") ? r.measures[key.slice(2)] : r[key];
  }
  function buildTable() {
    const head = el("tr");
    for (const [key, label] of COLUMNS()) {
      const th = el("th", "", { scope: "col" }), b = el("button", label, { type: "button" });
      b.addEventListener("click", () => { state.sort = { key, up: state.sort.key === key ? !state.sort.up : key === "number" || key === "hz" }; buildTable(); });
      if (state.sort.key === key) th.setAttribute("aria-sort", state.sort.up ? "ascending" : "descending");
      th.append(b); head.append(th);
    }
    const sign = state.sort.up ? 1 : -1, list = [...data.modes].sort((a, b) => sign * ((valueOf(a, state.sort.key) ?? -Infinity) - (valueOf(b, state.sort.key) ?? -Infinity)) || a.number - b.number);
    $("modes-table").tHead.replaceChildren(head); $("modes-table").tBodies[0].replaceChildren(...list.map(tableRow));
    fillTable();
  }
  const tops = Object.fromEntries(data.measure_names.map((name) => [name, Math.max(...data.modes.map((r) => r.measures[name] ?? 0)) || 1]));
  function tableRow(r) {
    const row = el("tr"); row.dataset.number = r.number; row.tabIndex = -1;
    for (const [key] of COLUMNS()) row.append(tableCell(r, key));
    return row;
  }
  function tableCell(r, key) {
    const td = el("td");
    if (key === "keep") {
      const box = el("input", "", { type: "checkbox", disabled: Boolean(r.always) });
      box.setAttribute("aria-label", `keep mode ${r.number}${r.always ? `, always kept: ${r.always}` : ""}`);
      td.append(box); if (r.always) td.append(el("span", ` ${r.always}`, { className: "quiet" }));
    } else if (key.startsWith("m:")) {
      const name = key.slice(2), v = r.measures[name], part = v === null ? 0 : v / tops[name];
      td.className = "share"; td.textContent = v === null ? (data.undefined[name] ? "undefined" : "") : name === "decay" ? C.engineering(v, "s") : C.percent(part);
      if (v === null && data.undefined[name]) td.title = data.undefined[name];
      const bar = el("i"); bar.style.width = `${Math.max(0, Math.min(1, part)) * 76}px`; td.append(bar);
    } else td.textContent = { number: () => r.number, hz: () => C.engineering(r.hz), tau: () => C.engineering(r.tau === null ? null : r.tau / tick), zeta: () => (r.zeta === null ? "" : C.percent(r.zeta).replace(" %", "")),
      cluster: () => r.cluster.join("-"), residual: () => (r.residual === null ? "" : r.residual.toExponential(1).replace("-", "−")), condition: () => (r.condition === null ? "" : C.engineering(r.condition)) }[key]();
    return td;
  }
  function fillTable() {
    for (const row of $("modes-table").tBodies[0].rows) {
      const number = Number(row.dataset.number), keep = trial.kept().has(number);
      row.classList.toggle("dropped", !keep); row.classList.toggle("focus", number === state.focus);
      row.querySelector("input").checked = keep;
    }
    $("modes-note").textContent = `${trial.kept().size} kept of ${data.modes.length}; tick to keep, click a heading to sort`;
  }

  let queue = [], painting = false;

  // ---- refresh ------------------------------------------------------------------------------------------------------------
  function refresh() {
    state.result = trial.evaluate();
    banner(); fillTable();
    queue = [drawSieve, drawResponse, drawError, fillPairs, drawCount, drawTime, drawPoles];
    if (!painting) { painting = true; requestAnimationFrame(paint); }
  }
  // One chart a frame: a tick answers at once, and a newer one starts the charts over.
  function paint() {
    const next = queue.shift();
    if (next) { next(); requestAnimationFrame(paint); } else painting = false;
  }
  function choosePair(e) { state.pair = e; fillPairs(); drawResponse(); drawError(); drawTime(); }
  function focusRow(number) { state.focus = number; fillTable(); if (shapes) shapes.show(number); }

  function saveList() {
    const lines = ["# keep list: modesieve truncate MODEL.h5 --keep-list THIS-FILE -o SMALL.h5", `keep = [${[...trial.kept()].sort((a, b) => a - b).join(", ")}]`, `model = "${data.fingerprint}"`, ""];
    const link = el("a", "", { href: URL.createObjectURL(new Blob([lines.join("\n")], { type: "application/toml" })), download: "keep.toml" });
    document.body.append(link); link.click(); link.remove();
  }

  function bind() {
    $("back").addEventListener("click", deliver); $("save").addEventListener("click", saveList);
    fillSelect("measure", data.measure_names.map((n) => [n, n]), state.measure, (v) => { state.measure = v; state.level = levelFor(trial.kept().size); drawSieve(); });
    fillSelect("rate", RATES.map(([n, v]) => [v, n]), 0, (v) => { state.rate = Number(v); drawResponse(); }); $("rate").parentElement.classList.toggle("hidden", data.kind !== "structure");
    fillSelect("error-kind", Object.entries(ERROR_KINDS).map(([k]) => [k, { local: "local", peak: "of the peak", phase: "phase" }[k]]), "local", (v) => { state.errorKind = v; drawError(); });
    fillSelect("count-view", [["band", "in the band"], ["axis", "whole axis, over states"]], "band", (v) => { state.countView = v; drawCount(); }); $("count-pick").classList.toggle("hidden", !data.axis || !data.axis.states);
    $("sieve-line").addEventListener("keydown", (event) => {
      const by = { ArrowUp: -1, ArrowRight: 1, ArrowDown: 1, ArrowLeft: -1, PageUp: -10, PageDown: 10 }[event.key];
      if (by) { event.preventDefault(); moveCount(by); }
    });
    $("modes-table").tBodies[0].addEventListener("click", (event) => {
      const row = event.target.closest("tr");
      if (!row) return;
      if (event.target.matches("input")) toggle(Number(row.dataset.number));
      focusRow(Number(row.dataset.number));
    });
    const chart = $("sieve-chart");
    bindLine();
    chart.on("plotly_click", (event) => { const n = event.points[0].customdata; if (n) { toggle(n); focusRow(n); } });
    matchMedia("(prefers-color-scheme: dark)").addEventListener("change", () => { refresh(); drawCoupling(); });
    window.addEventListener("beforeprint", () => { for (const d of document.querySelectorAll(".chart")) Plotly.Plots.resize(d); });
  }
  // The sieve line is a handle of its own over the chart: its height is the level on the logarithmic axis.
  const plotArea = () => $("sieve-chart").querySelector(".nsewdrag").getBoundingClientRect();
  const LOW = Math.log10(SIEVE_FLOOR / 1.5), HIGH = Math.log10(2.2);
  function placeLine() {
    const area = plotArea(), frame = $("sieve-line").getBoundingClientRect(), handle = $("sieve-handle");
    const share01 = (Math.log10(Math.max(state.level, SIEVE_FLOOR)) - LOW) / (HIGH - LOW);
    Object.assign(handle.style, { left: `${area.left - frame.left}px`, width: `${area.width}px`, top: `${area.bottom - frame.top - share01 * area.height - 8}px` });
  }
  function bindLine() {
    const handle = $("sieve-handle");
    handle.addEventListener("pointerdown", (event) => { handle.setPointerCapture(event.pointerId); event.preventDefault(); });
    handle.addEventListener("pointermove", (event) => {
      if (!handle.hasPointerCapture(event.pointerId)) return;
      const area = plotArea(), up = Math.min(1, Math.max(0, (area.bottom - event.clientY) / area.height));
      moveLine(10 ** (LOW + up * (HIGH - LOW)));
      placeLine();
    });
    window.addEventListener("resize", placeLine);
  }
  function fillSelect(id, options, value, then) {
    $(id).replaceChildren(...options.map(([v, text]) => el("option", text, { value: v })));
    $(id).value = value; $(id).addEventListener("change", () => then($(id).value));
  }
  function facts() {
    $("facts").replaceChildren(...data.facts.flatMap(([name, text]) => [el("dt", name), el("dd", text)]));
    $("commands").textContent = data.commands.join("\n");
  }

  const shapes = data.shapes ? Shapes.create(data.shapes, { canvas: $("shape-canvas"), button: $("shape-play"), title: $("shape-title"), words: (n) => grainWords(byNumber.get(n)) }) : null;
  header(); facts(); buildPairs();
  trial.set(data.delivered.kept); state.result = trial.evaluate(); state.level = levelFor(data.delivered.kept.length);
  buildTable(); deliver(); drawSieve(); bind(); drawCoupling();
  if (shapes) { $("shape").classList.remove("hidden"); focusRow(data.modes.find((r) => !r.always)?.number ?? 1); }

  // For tests and for readers with a console: the same calls as the mouse makes.
  return { keep: (numbers) => { state.pins.clear(); for (const r of data.modes) state.pins.set(r.number, numbers.includes(r.number)); trial.set(numbers); refresh(); }, result: () => state.result, kept: () => [...trial.kept()],
    toggle, moveCount, moveLine, choosePair, deliver, data };
})();
