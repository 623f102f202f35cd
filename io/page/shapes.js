"use strict";
// Draws one mode shape on a canvas: nodes and lines, moving unless the reader prefers stillness.

const Shapes = (() => {
  function create(stored, view) {
    const xyz = Numbers.array(stored.xyz), moves = Numbers.array(stored.moves), nodes = xyz.length / 3, still = matchMedia("(prefers-reduced-motion: reduce)").matches;
    const eye = [[Math.cos(0.6), Math.sin(0.6), 0], [-Math.sin(0.6) * 0.38, Math.cos(0.6) * 0.38, 0.92]];
    let mode = 1, playing = !still, phase = Math.PI / 2, size = 1;
    for (let a = 0; a < 3; a++) {
      let lo = Infinity, hi = -Infinity;
      for (let n = 0; n < nodes; n++) { lo = Math.min(lo, xyz[3 * n + a]); hi = Math.max(hi, xyz[3 * n + a]); }
      size = Math.max(size * (a > 0), hi - lo);
    }
    const project = (x, y, z) => eye.map((e) => e[0] * x + e[1] * y + e[2] * z);

    function frame() {
      const { canvas } = view, ratio = devicePixelRatio || 1, w = canvas.clientWidth, h = canvas.clientHeight, ink = getComputedStyle(document.documentElement);
      if (!w) return;
      canvas.width = w * ratio; canvas.height = h * ratio;
      const g = canvas.getContext("2d"), at = (mode - 1) * nodes * 3;
      let top = 0;
      for (let i = 0; i < nodes * 3; i++) top = Math.max(top, Math.abs(moves[at + i]));
      const amplitude = top ? (0.12 * size) / top : 0, swing = Math.sin(phase);
      const rest = [], bent = [];
      for (let n = 0; n < nodes; n++) {
        const q = [0, 1, 2].map((a) => xyz[3 * n + a]);
        rest.push(project(...q)); bent.push(project(...q.map((v, a) => v + swing * amplitude * moves[at + 3 * n + a])));
      }
      const us = rest.map((q) => q[0]), vs = rest.map((q) => q[1]), mid = (l) => (Math.min(...l) + Math.max(...l)) / 2, span = (l) => Math.max(...l) - Math.min(...l) + 0.3 * size;
      const k = ratio * Math.min(w / span(us), h / span(vs)), px = (q) => [canvas.width / 2 + k * (q[0] - mid(us)), canvas.height / 2 - k * (q[1] - mid(vs))];
      const paint = (points, color, width) => {
        g.strokeStyle = g.fillStyle = color; g.lineWidth = width * ratio; g.beginPath();
        for (const [a, b] of stored.lines) { g.moveTo(...px(points[a])); g.lineTo(...px(points[b])); }
        g.stroke();
        if (!stored.lines.length) for (const q of points) { const [x, y] = px(q); g.fillRect(x - ratio, y - ratio, 2 * ratio, 2 * ratio); }
      };
      paint(rest, ink.getPropertyValue("--line").trim(), 1);
      paint(bent, ink.getPropertyValue("--blue").trim(), 1.6);
    }
    function tick() { if (playing) { phase += 0.07; frame(); } requestAnimationFrame(tick); }
    function show(number) { mode = number; view.title.textContent = `Mode shape: ${view.words(number)}`; if (!playing) phase = Math.PI / 2; frame(); }
    view.button.textContent = playing ? "Pause" : "Play";
    view.button.addEventListener("click", () => { playing = !playing; view.button.textContent = playing ? "Pause" : "Play"; if (!playing) { phase = Math.PI / 2; frame(); } });
    requestAnimationFrame(tick);
    return { show };
  }
  return { create };
})();
