"use strict";
// What is kept, and what follows from it: the small model's response, its error and its verdict. No drawing here.

const Trial = ((N, T) => {
  function create(data) {
    const full = N.complex(data.full), omega = N.array(data.omega), { p, m } = data.system, pairs = p * m;
    const scale = N.array(data.scale), system = N.decode(data.system), threshold = data.threshold;
    const hub = data.hub ? hubOf(data.hub) : null, levels = data.hub ? data.hub.levels : 0;
    const D = N.array(data.system.D), X = data.system.X ? N.array(data.system.X) : new Float64Array(pairs);
    const statics = data.statics_matrix ? N.array(data.statics_matrix) : null, dc = N.array(data.term_statics);
    const sigmaFull = N.largestSingular(full, scale, omega.length, p, m);
    const peak = data.reference_peak;
    const always = new Set(data.modes.filter((r) => r.always).map((r) => r.number));
    const termOf = new Map(data.modes.map((r) => [r.number, r.term]));
    let kept = new Set(data.delivered.kept);

    let tail = null;

    function hubOf(stored) {
      const terms = T.decode(stored), past = Array.from({ length: terms.k - stored.computed }, (_, i) => i + stored.computed);
      return { terms, tail: past, error: N.array(stored.error), pairError: N.array(stored.pair_error), system: asSystem(terms) };
    }

    // A list of real terms in the form that numbers.js evaluates.
    function asSystem(t) {
      if (t.order === 2) return { form: "second order", ...t };
      const index = Array.from({ length: t.k }, (_, i) => i);
      return { form: "first order", p: t.p, m: t.m, k: t.k, states: t.k, sizes: index.map(() => 1), first: index, firstBlock: index, blocks: t.x.map((v) => -v), B: t.b, C: t.cq, direct: null };
    }

    // Always-kept modes and the rest of a block come along.
    function complete(numbers) {
      const terms = new Set([...numbers, ...always].map((n) => termOf.get(n)));
      return new Set(data.modes.filter((r) => terms.has(r.term)).map((r) => r.number));
    }

    // With tail levels, everything that is not kept answers statically through pseudo-modes.
    function retail() { tail = levels ? T.pseudoModes(hub.terms, new Set(keptTerms()), levels) : null; }

    const keptTerms = () => [...new Set([...kept].map((n) => termOf.get(n)))].sort((a, b) => a - b);

    // The part that belongs to no mode: D, and with the static remainder what the kept modes do not already carry.
    function remainder() {
      const out = X.slice();
      if (data.delivered.statics !== "feedthrough" || !statics) return out;
      for (let e = 0; e < pairs; e++) out[e] += statics[e];
      for (const t of keptTerms()) for (let e = 0; e < pairs; e++) out[e] -= dc[t * pairs + e];
      return out;
    }

    function response() {
      const acc = N.zeros(full.re.length);
      for (const t of keptTerms()) N.addTerm(acc, system, t, omega, 1);
      if (tail) for (let i = 0; i < tail.k; i++) N.addTerm(acc, tail, i, omega, 1);
      N.addThrough(acc, D, remainder(), data.eta_rest, omega);
      return acc;
    }

    const minus = (a, b) => ({ re: a.re.map((v, i) => v - b.re[i]), im: a.im.map((v, i) => v - b.im[i]) });

    function hubResponse() {
      const H = N.zeros(full.re.length);
      for (let i = 0; i < hub.terms.k; i++) N.addTerm(H, hub.system, i, omega, 1);
      N.addThrough(H, D, X, data.eta_rest, omega);
      return H;
    }

    // The reference model: every computed mode and its tail levels, minus the small model, plus its own bound.
    function guaranteed(R) {
      if (!hub) return null;
      hub.response ||= hubResponse();
      const gap = minus(hub.response, R), sigma = N.largestSingular(gap, scale, omega.length, p, m);
      const perPair = new Float64Array(full.re.length);
      for (let i = 0; i < perPair.length; i++) {
        perPair[i] = Math.hypot(gap.re[i], gap.im[i]) * scale[i % pairs] + hub.pairError[i];
      }
      return { sigma: sigma.map((v, w) => v + hub.error[w]), perPair };
    }

    function evaluate() {
      const R = response(), error = minus(full, R), sigma = N.largestSingular(error, scale, omega.length, p, m);
      const local = sigma.map((v, w) => v / Math.max(sigmaFull[w], threshold));
      const best = (list) => list.reduce((at, v, i) => (v > list[at] ? i : at), 0);
      const atPeak = best(sigma), atLocal = best(local), inBand = (w) => data.in_band[w];
      return {
        R, error, sigma, local, sigmaFull, guaranteed: guaranteed(R),
        peak: { value: worst(sigma.map((v) => v / peak), inBand), omega: omega[atPeak] },
        localWorst: { value: worst(local, inBand), omega: omega[atLocal] },
        pairs: worstOfPairs(error), kept: kept.size, states: statesOf(),
      };
    }

    const worst = (list, inBand) => list.reduce((top, v, i) => (inBand(i) && v > top ? v : top), 0);

    function statesOf() {
      const each = (s, t) => (s.form === "second order" ? 2 : s.sizes[t]);
      let total = keptTerms().reduce((sum, t) => sum + each(system, t), 0);
      if (tail) for (let i = 0; i < tail.k; i++) total += each(tail, i);
      return total;
    }

    // Per pair: worst error in the output's unit per input amplitude, and as a share of that pair's own peak.
    function worstOfPairs(error) {
      const out = Array.from({ length: pairs }, () => ({ value: 0, share: 0, omega: omega[0] }));
      const top = new Float64Array(pairs);
      for (let i = 0; i < error.re.length; i++) {
        const e = i % pairs, w = (i - e) / pairs;
        if (!data.in_band[w]) continue;
        const size = Math.hypot(error.re[i], error.im[i]);
        if (size > out[e].value) { out[e].value = size; out[e].omega = omega[w]; }
        top[e] = Math.max(top[e], Math.hypot(full.re[i], full.im[i]));
      }
      // A pair that never rises above the threshold (rounding, symmetry) has no share to speak of.
      out.forEach((o, e) => { o.share = top[e] * scale[e] > threshold * (1 - 1e-12) ? o.value / top[e] : NaN; });
      return out;
    }

    function step(row, col, t) {
      const y = new Float64Array(t.length), e = row * m + col, X = remainder();
      for (const i of keptTerms()) N.addStep(y, system, i, row, col, t);
      if (tail) for (let i = 0; i < tail.k; i++) N.addStep(y, tail, i, row, col, t);
      const scaled = data.amplitudes[col];
      return y.map((v) => (v + D[e] + X[e]) * scaled);
    }

    retail();
    return {
      omega, full, sigmaFull, p, m, always, evaluate, step, complete, peak,
      kept: () => kept,
      set: (numbers) => { kept = complete(numbers); retail(); },
      isDelivered: () => kept.size === data.delivered.kept.length && data.delivered.kept.every((n) => kept.has(n)),
    };
  }
  return { create };
})(typeof Numbers !== "undefined" ? Numbers : require("./numbers.js"), typeof Tails !== "undefined" ? Tails : require("./tails.js"));

if (typeof module !== "undefined") module.exports = Trial;
