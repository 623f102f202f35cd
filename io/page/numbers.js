"use strict";
// Evaluates small modal systems in the browser with the formulas of the delivered file; no drawing here.
// Complex arrays are pairs of Float64Array (re, im) over [frequency][output][input].

const Numbers = (() => {
  const bytes = (text) => Uint8Array.from(atob(text), (c) => c.charCodeAt(0)).buffer;
  const array = (ref) => (ref === null || ref === undefined ? null : new Float64Array(bytes(ref.f8)));
  const complex = (ref) => {
    const both = array(ref);
    const out = zeros(both.length / 2);
    for (let i = 0; i < out.re.length; i++) { out.re[i] = both[2 * i]; out.im[i] = both[2 * i + 1]; }
    return out;
  };
  const zeros = (size) => ({ re: new Float64Array(size), im: new Float64Array(size) });
  const copy = (z) => ({ re: z.re.slice(), im: z.im.slice() });

  // A system as stored: numbers decoded once. terms(k), inputs m, outputs p.
  function decode(stored) {
    const s = { form: stored.form, p: stored.p, m: stored.m, k: stored.terms };
    if (s.form === "second order") {
      for (const name of ["x", "d", "eta", "b", "cq", "cv", "ca"]) s[name] = array(stored[name]);
    } else {
      s.sizes = stored.sizes;
      for (const name of ["blocks", "B", "C", "direct"]) s[name] = array(stored[name]);
      s.first = []; s.firstBlock = [];
      let row = 0, cell = 0;
      for (const r of s.sizes) { s.first.push(row); s.firstBlock.push(cell); row += r; cell += r * r; }
      s.states = row;
    }
    return s;
  }

  // acc += sign * term i of s, for all pairs.
  function addTerm(acc, s, i, omega, sign) {
    if (s.form === "second order") secondOrder(acc, s, i, omega, sign);
    else {
      if (s.sizes[i] <= 2) smallBlock(acc, s, i, omega, sign);
      else largeBlock(acc, s, i, omega, sign);
      if (s.direct) addDirect(acc, s, i, omega, sign);
    }
  }

  // The feedthrough that belongs to term i: of velocity and acceleration outputs.
  function addDirect(acc, s, i, omega, sign) {
    const size = s.p * s.m;
    for (let w = 0; w < omega.length; w++) for (let e = 0; e < size; e++) acc.re[w * size + e] += sign * s.direct[i * size + e];
  }

  function secondOrder(acc, s, i, omega, sign) {
    const { p, m, k } = s;
    for (let w = 0; w < omega.length; w++) {
      const o = omega[w], re = s.x[i] - o * o, im = s.x[i] * s.eta[i] * Math.sign(o) + o * s.d[i];
      const size = re * re + im * im, hr = (sign * re) / size, hi = (-sign * im) / size;
      for (let r = 0; r < p; r++) {
        const cr = s.cq[r * k + i] - o * o * s.ca[r * k + i], ci = o * s.cv[r * k + i];
        const gr = cr * hr - ci * hi, gi = cr * hi + ci * hr;
        for (let c = 0; c < m; c++) {
          const b = s.b[i * m + c], at = (w * p + r) * m + c;
          acc.re[at] += gr * b; acc.im[at] += gi * b;
        }
      }
    }
  }

  // (j w I - A)^-1 for a 1 x 1 or 2 x 2 real block, written out.
  function smallBlock(acc, s, i, omega, sign) {
    const { p, m, states } = s, f = s.first[i], q = s.firstBlock[i], r = s.sizes[i], A = s.blocks;
    for (let w = 0; w < omega.length; w++) {
      const o = omega[w];
      let inv;
      if (r === 1) inv = [divide(1, 0, -A[q], o)];
      else {
        const a = A[q], b = A[q + 1], c = A[q + 2], d = A[q + 3];
        const dr = a * d - o * o - b * c, di = -o * (a + d);
        inv = [divide(-d, o, dr, di), divide(b, 0, dr, di), divide(c, 0, dr, di), divide(-a, o, dr, di)];
      }
      for (let row = 0; row < p; row++) for (let col = 0; col < m; col++) {
        let re = 0, im = 0;
        for (let u = 0; u < r; u++) for (let v = 0; v < r; v++) {
          const g = s.C[row * states + f + u] * s.B[(f + v) * m + col];
          re += g * inv[u * r + v][0]; im += g * inv[u * r + v][1];
        }
        const at = (w * p + row) * m + col;
        acc.re[at] += sign * re; acc.im[at] += sign * im;
      }
    }
  }

  const divide = (ar, ai, br, bi) => {
    const size = br * br + bi * bi;
    return [(ar * br + ai * bi) / size, (ai * br - ar * bi) / size];
  };

  // Larger blocks by elimination with row pivoting.
  function largeBlock(acc, s, i, omega, sign) {
    const { p, m, states } = s, f = s.first[i], q = s.firstBlock[i], r = s.sizes[i];
    for (let w = 0; w < omega.length; w++) {
      const Z = [], R = [];
      for (let u = 0; u < r; u++) {
        Z.push(Array.from({ length: r }, (_, v) => [-s.blocks[q + u * r + v], u === v ? omega[w] : 0]));
        R.push(Array.from({ length: m }, (_, c) => [s.B[(f + u) * m + c], 0]));
      }
      solve(Z, R);
      for (let row = 0; row < p; row++) for (let col = 0; col < m; col++) {
        const at = (w * p + row) * m + col;
        for (let u = 0; u < r; u++) {
          acc.re[at] += sign * s.C[row * states + f + u] * R[u][col][0];
          acc.im[at] += sign * s.C[row * states + f + u] * R[u][col][1];
        }
      }
    }
  }

  function solve(Z, R) {
    const r = Z.length, size = (z) => Math.abs(z[0]) + Math.abs(z[1]);
    const less = (a, f, b) => [a[0] - f[0] * b[0] + f[1] * b[1], a[1] - f[0] * b[1] - f[1] * b[0]];
    for (let k = 0; k < r; k++) {
      let best = k;
      for (let u = k + 1; u < r; u++) if (size(Z[u][k]) > size(Z[best][k])) best = u;
      [Z[k], Z[best]] = [Z[best], Z[k]]; [R[k], R[best]] = [R[best], R[k]];
      for (let u = 0; u < r; u++) {
        if (u === k) continue;
        const f = divide(Z[u][k][0], Z[u][k][1], Z[k][k][0], Z[k][k][1]);
        Z[u] = Z[u].map((z, v) => less(z, f, Z[k][v]));
        R[u] = R[u].map((z, c) => less(z, f, R[k][c]));
      }
    }
    for (let k = 0; k < r; k++) R[k] = R[k].map((z) => divide(z[0], z[1], Z[k][k][0], Z[k][k][1]));
  }

  // acc += D + X / (1 + j eta sgn w); D and X are (p, m) arrays.
  function addThrough(acc, D, X, eta, omega) {
    const pairs = D.length;
    for (let w = 0; w < omega.length; w++) {
      const [fr, fi] = divide(1, 0, 1, eta * Math.sign(omega[w]));
      for (let e = 0; e < pairs; e++) {
        acc.re[w * pairs + e] += D[e] + X[e] * fr; acc.im[w * pairs + e] += X[e] * fi;
      }
    }
  }

  // Largest singular value of every (p, m) slice of z times scale (p, m): from the eigenvalues of the smaller Gram.
  function largestSingular(z, scale, count, p, m) {
    const out = new Float64Array(count), q = Math.min(p, m), long = Math.max(p, m), wide = p <= m;
    const at = (w, a, l) => (wide ? (w * p + a) * m + l : (w * p + l) * m + a);
    for (let w = 0; w < count; w++) {
      const H = Array.from({ length: q }, () => new Array(q));
      for (let a = 0; a < q; a++) for (let b = 0; b <= a; b++) {
        let re = 0, im = 0;
        for (let l = 0; l < long; l++) {
          const i = at(w, a, l), j = at(w, b, l), g = scale[i % (p * m)] * scale[j % (p * m)];
          re += g * (z.re[i] * z.re[j] + z.im[i] * z.im[j]); im += g * (z.im[i] * z.re[j] - z.re[i] * z.im[j]);
        }
        H[a][b] = [re, im]; H[b][a] = [re, -im];
      }
      out[w] = Math.sqrt(Math.max(0, largestEigenvalue(H)));
    }
    return out;
  }

  // Cyclic Jacobi on a small Hermitian matrix.
  function largestEigenvalue(H) {
    const q = H.length;
    if (q === 1) return H[0][0][0];
    const scale = H.reduce((sum, row, a) => sum + Math.abs(row[a][0]), 0) || 1;
    for (let sweep = 0; sweep < 30; sweep++) {
      let off = 0;
      for (let a = 0; a < q; a++) for (let b = 0; b < a; b++) off += Math.hypot(H[a][b][0], H[a][b][1]);
      if (off < 1e-16 * scale) break;
      for (let a = 1; a < q; a++) for (let b = 0; b < a; b++) rotate(H, b, a);
    }
    return Math.max(...H.map((row, a) => row[a][0]));
  }

  function rotate(H, a, b) {
    const size = Math.hypot(H[a][b][0], H[a][b][1]);
    if (size === 0) return;
    const phase = [H[a][b][0] / size, H[a][b][1] / size], theta = (H[b][b][0] - H[a][a][0]) / (2 * size);
    const t = (theta >= 0 ? 1 : -1) / (Math.abs(theta) + Math.hypot(theta, 1)), c = 1 / Math.hypot(t, 1), s = t * c;
    const mul = (x, y) => [x[0] * y[0] - x[1] * y[1], x[0] * y[1] + x[1] * y[0]];
    const conj = (x) => [x[0], -x[1]];
    for (let k = 0; k < H.length; k++) {
      const u = H[k][a], v = mul(H[k][b], conj(phase));
      H[k][a] = [c * u[0] - s * v[0], c * u[1] - s * v[1]];
      H[k][b] = [s * u[0] + c * v[0], s * u[1] + c * v[1]];
    }
    for (let k = 0; k < H.length; k++) {
      const u = H[a][k], v = mul(H[b][k], phase);
      H[a][k] = [c * u[0] - s * v[0], c * u[1] - s * v[1]];
      H[b][k] = [s * u[0] + c * v[0], s * u[1] + c * v[1]];
    }
    // What rounding leaves would no longer be Hermitian, and would be rotated for ever.
    H[a][b] = [0, 0]; H[b][a] = [0, 0]; H[a][a][1] = 0; H[b][b][1] = 0;
  }

  // Unit-step response of term i for one pair at the times t, added to acc.
  function addStep(acc, s, i, row, col, t) {
    if (s.form === "second order") stepSecondOrder(acc, s, i, row, col, t);
    else {
      if (s.sizes[i] === 1) stepPole(acc, s, i, row, col, t);
      else stepBlock(acc, s, i, row, col, t);
      if (s.direct) for (let n = 0; n < t.length; n++) acc[n] += s.direct[(i * s.p + row) * s.m + col];
    }
  }

  function stepSecondOrder(acc, s, i, row, col, t) {
    const { m, k } = s, x = s.x[i], d = s.d[i] + s.eta[i] * Math.sqrt(Math.max(x, 0)), b = s.b[i * m + col];
    const cq = s.cq[row * k + i], cv = s.cv[row * k + i], ca = s.ca[row * k + i];
    for (let n = 0; n < t.length; n++) {
      const [q, v] = stepState(x, d, t[n]);
      acc[n] += b * (cq * q + cv * v + ca * (1 - d * v - x * q));
    }
  }

  // Displacement and velocity of q'' + d q' + x q = 1 from rest.
  function stepState(x, d, t) {
    const half = d / 2, square = x - half * half;
    if (x === 0) return d === 0 ? [t * t / 2, t] : [(t + Math.expm1(-d * t) / d) / d, -Math.expm1(-d * t) / d];
    const decay = Math.exp(-half * t);
    if (square > 0) {
      const w = Math.sqrt(square), c = Math.cos(w * t), sn = Math.sin(w * t) / w;
      return [(1 - decay * (c + half * sn)) / x, decay * sn];
    }
    const g = Math.sqrt(-square);
    if (g * t < 1e-8) return [(1 - decay * (1 + half * t)) / x, decay * t];
    const p1 = -half + g, p2 = -half - g, e1 = Math.exp(p1 * t), e2 = Math.exp(p2 * t);
    return [(1 + (p2 * e1 - p1 * e2) / (p1 - p2)) / x, (e1 - e2) / (p1 - p2)];
  }

  function stepPole(acc, s, i, row, col, t) {
    const lambda = s.blocks[s.firstBlock[i]], g = s.C[row * s.states + s.first[i]] * s.B[s.first[i] * s.m + col];
    for (let n = 0; n < t.length; n++) acc[n] += g * (lambda === 0 ? t[n] : Math.expm1(lambda * t[n]) / lambda);
  }

  // Blocks of two and more: propagate exactly from one time to the next with a scaled Taylor exponential.
  function stepBlock(acc, s, i, row, col, t) {
    const r = s.sizes[i], f = s.first[i], q = s.firstBlock[i], size = r + 1;
    const M = Array.from({ length: size }, (_, u) => Array.from({ length: size }, (_, v) =>
      u === r ? 0 : v === r ? s.B[(f + u) * s.m + col] : s.blocks[q + u * r + v]));
    let state = new Array(size).fill(0), step = NaN, E = null;
    state[r] = 1;
    for (let n = 0; n < t.length; n++) {
      const dt = n === 0 ? t[0] : t[n] - t[n - 1];
      if (!(Math.abs(dt - step) <= 1e-12 * Math.abs(step))) { E = exponential(M, dt); step = dt; }
      state = E.map((line) => line.reduce((sum, e, v) => sum + e * state[v], 0));
      for (let u = 0; u < r; u++) acc[n] += s.C[row * s.states + f + u] * state[u];
    }
  }

  function exponential(M, dt) {
    const size = M.length, norm = Math.max(...M.map((l) => l.reduce((a, e) => a + Math.abs(e), 0))) * Math.abs(dt);
    const halvings = Math.max(0, Math.ceil(Math.log2(norm || 1)) + 3), h = dt / 2 ** halvings;
    const times = (A, B) => A.map((l) => B[0].map((_, v) => l.reduce((a, e, k) => a + e * B[k][v], 0)));
    const eye = M.map((_, u) => M.map((_, v) => (u === v ? 1 : 0)));
    let E = eye, term = eye;
    for (let k = 1; k <= 14; k++) {
      term = times(term, M).map((l) => l.map((e) => (e * h) / k));
      E = E.map((l, u) => l.map((e, v) => e + term[u][v]));
    }
    for (let k = 0; k < halvings; k++) E = times(E, E);
    return E;
  }

  return { array, complex, zeros, copy, decode, addTerm, addThrough, addStep, largestSingular };
})();

if (typeof module !== "undefined") module.exports = Numbers;
