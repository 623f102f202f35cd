"use strict";
// Tail levels of a trial: the pseudo-modes that make its statics exact, from everything it does not keep.
// The same steps as truncation/tails.py, in the coordinates of the reference model, where K and M are diagonal.

const Tails = ((N) => {
  const NEW = 1e-7, NOISE = 1e-12;

  // hub: order, k terms, x, b (k, m), cq, cv, ca (p, k), damping rule. Returns terms in the form of numbers.js.
  function pseudoModes(hub, keep, levels) {
    const rest = Array.from({ length: hub.k }, (_, i) => i).filter((i) => !keep.has(i)), n = rest.length;
    if (!levels || !n) return null;
    const ports = portColumns(hub, rest), sizes = portSizes(hub), root = rest.map((i) => Math.sqrt(hub.x[i]));
    let block = ports.map((column) => column.map((v, r) => v / root[r])).filter((column, j) => norm(column) > NOISE * sizes[j]);
    const basis = [];
    for (let level = 0; level < levels; level++) {
      const fresh = newDirections(block, basis);
      basis.push(...fresh);
      block = fresh.map((column) => column.map((v, r) => v / hub.x[rest[r]]));
    }
    if (!basis.length) return null;
    const q = basis.length, S = Array.from({ length: q }, (_, i) => Array.from({ length: q }, (_, j) => dot(basis[i], basis[j].map((v, r) => v / hub.x[rest[r]]))));
    const { values, vectors } = symmetricEigen(S);
    const V = values.map((mu, e) => rest.map((_, r) => basis.reduce((sum, column, i) => sum + column[r] * vectors[i][e], 0) / root[r] / Math.sqrt(mu)));
    return terms(hub, rest, V, values.map((mu) => 1 / mu));
  }

  function terms(hub, rest, V, x) {
    const { p, m } = hub, k = V.length, into = new Float64Array(k * m), out = (C) => {
      const made = new Float64Array(p * k);
      for (let row = 0; row < p; row++) for (let e = 0; e < k; e++) made[row * k + e] = rest.reduce((sum, i, r) => sum + C[row * hub.k + i] * V[e][r], 0);
      return made;
    };
    for (let e = 0; e < k; e++) for (let c = 0; c < m; c++) into[e * m + c] = rest.reduce((sum, i, r) => sum + hub.b[i * m + c] * V[e][r], 0);
    if (hub.order === 1) {
      return { form: "first order", p, m, k, states: k, sizes: x.map(() => 1), first: x.map((_, e) => e), firstBlock: x.map((_, e) => e), blocks: Float64Array.from(x, (v) => -v), B: into, C: out(hub.cq), direct: null };
    }
    return { form: "second order", p, m, k, x: Float64Array.from(x), d: Float64Array.from(x, (v) => viscous(hub.rule, v)), eta: Float64Array.from(x, () => hub.rule.eta || 0), b: into, cq: out(hub.cq), cv: out(hub.cv), ca: out(hub.ca) };
  }

  // The base damping's own rule at a pseudo-mode.
  function viscous(rule, x) {
    const w = Math.sqrt(Math.max(x, 0));
    if (rule.ratio === undefined) return (rule.alpha || 0) + (rule.beta || 0) * x;
    return 2 * interpolate(w, rule.omega, rule.ratio) * w;
  }
  function interpolate(w, xs, ys) {
    if (xs.length < 2 || w <= xs[0]) return ys[0];
    for (let i = 1; i < xs.length; i++) if (w <= xs[i]) return ys[i - 1] + ((ys[i] - ys[i - 1]) * (w - xs[i - 1])) / (xs[i] - xs[i - 1]);
    return ys[ys.length - 1];
  }

  const dot = (a, b) => a.reduce((sum, v, i) => sum + v * b[i], 0), norm = (a) => Math.sqrt(dot(a, a));
  function portColumns(hub, rest) {
    const { p, m } = hub, columns = [];
    for (let c = 0; c < m; c++) columns.push(rest.map((i) => hub.b[i * m + c]));
    for (const C of [hub.cq, hub.cv, hub.ca]) for (let row = 0; row < p; row++) columns.push(rest.map((i) => C[row * hub.k + i]));
    return columns;
  }
  function portSizes(hub) {
    const elastic = Array.from({ length: hub.k }, (_, i) => i).filter((i) => hub.x[i] > 0);
    return portColumns(hub, elastic).map((column) => Math.sqrt(column.reduce((sum, v, r) => sum + (v * v) / hub.x[elastic[r]], 0)));
  }

  // Orthonormal directions of the block's columns beside the basis, by scaled singular vectors.
  function newDirections(block, basis) {
    let Y = block.map((column) => [norm(column), column]).filter(([size]) => size > 0).map(([size, column]) => column.map((v) => v / size));
    for (const threshold of [NEW, 1e-2]) {
      for (let pass = 0; pass < 2; pass++) Y = Y.map((y) => { const c = basis.map((q) => dot(q, y)); return y.map((v, r) => v - basis.reduce((sum, q, i) => sum + q[r] * c[i], 0)); });
      Y = leftSingular(Y, threshold);
    }
    return Y;
  }

  // Left singular vectors with singular values above the threshold, by one-sided Jacobi.
  function leftSingular(columns, threshold) {
    const A = columns.map((column) => column.slice());
    for (let sweep = 0; sweep < 60; sweep++) {
      let turned = false;
      for (let i = 0; i < A.length; i++) for (let j = i + 1; j < A.length; j++) {
        const a = dot(A[i], A[i]), b = dot(A[j], A[j]), g = dot(A[i], A[j]);
        if (Math.abs(g) <= 1e-15 * Math.sqrt(a * b) || g === 0) continue;
        turned = true;
        const zeta = (b - a) / (2 * g), t = (zeta >= 0 ? 1 : -1) / (Math.abs(zeta) + Math.hypot(1, zeta)), c = 1 / Math.hypot(1, t), s = c * t;
        for (let r = 0; r < A[i].length; r++) { const u = A[i][r], v = A[j][r]; A[i][r] = c * u - s * v; A[j][r] = s * u + c * v; }
      }
      if (!turned) break;
    }
    return A.map((column) => [norm(column), column]).filter(([size]) => size > threshold).sort((u, v) => v[0] - u[0]).map(([size, column]) => column.map((v) => v / size));
  }

  // Eigenvalues (descending) and eigenvectors of a symmetric matrix, by cyclic Jacobi.
  function symmetricEigen(S) {
    const q = S.length, A = S.map((line) => line.slice()), V = S.map((_, i) => S.map((_, j) => (i === j ? 1 : 0)));
    for (let sweep = 0; sweep < 60; sweep++) {
      let off = 0, size = 0;
      for (let i = 0; i < q; i++) for (let j = 0; j < q; j++) { size += A[i][j] ** 2; if (i !== j) off += A[i][j] ** 2; }
      if (off <= 1e-34 * size) break;
      for (let i = 0; i < q; i++) for (let j = i + 1; j < q; j++) {
        if (A[i][j] === 0) continue;
        const zeta = (A[j][j] - A[i][i]) / (2 * A[i][j]), t = (zeta >= 0 ? 1 : -1) / (Math.abs(zeta) + Math.hypot(1, zeta)), c = 1 / Math.hypot(1, t), s = c * t;
        for (let k = 0; k < q; k++) { const u = A[k][i], v = A[k][j]; A[k][i] = c * u - s * v; A[k][j] = s * u + c * v; }
        for (let k = 0; k < q; k++) { const u = A[i][k], v = A[j][k]; A[i][k] = c * u - s * v; A[j][k] = s * u + c * v; }
        for (let k = 0; k < q; k++) { const u = V[k][i], v = V[k][j]; V[k][i] = c * u - s * v; V[k][j] = s * u + c * v; }
      }
    }
    const order = A.map((line, i) => [line[i], i]).sort((u, v) => v[0] - u[0]);
    return { values: order.map(([value]) => value), vectors: V.map((line) => order.map(([, i]) => line[i])) };
  }

  // The reference model as stored by payload.py.
  function decode(stored) {
    const hub = { order: stored.order, k: stored.terms, p: stored.p, m: stored.m, rule: stored.rule };
    for (const name of ["x", "b", "cq", "cv", "ca", "d", "eta"]) hub[name] = N.array(stored[name]);
    return hub;
  }
  return { pseudoModes, decode };
})(typeof Numbers !== "undefined" ? Numbers : require("./numbers.js"));

if (typeof module !== "undefined") module.exports = Tails;
