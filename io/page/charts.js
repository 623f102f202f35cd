"use strict";
// Draws with Plotly: one function a chart. Textures say the certainty: filled = guaranteed, points = measured,
// open dashes = estimated, fine dots = floor.

const Charts = (() => {
  const css = (name) => getComputedStyle(document.documentElement).getPropertyValue(name).trim();
  const palette = () => ({ ink: css("--ink"), paper: css("--paper"), quiet: css("--quiet"), line: css("--line"),
    blue: css("--blue"), vermilion: css("--vermilion"), green: css("--green"), purple: css("--purple") });
  // Plotly reads a little markup in its texts; names come from files.
  const plain = (text) => String(text).replace(/&/g, "&amp;").replace(/</g, "&lt;").replace(/>/g, "&gt;");
  const PREFIXES = [[1e9, "G"], [1e6, "M"], [1e3, "k"], [1, ""], [1e-3, "m"], [1e-6, "µ"], [1e-9, "n"]];

  function engineering(value, unit) {
    if (value === null || value === undefined || Number.isNaN(value)) return "undefined";
    if (!Number.isFinite(value)) return value > 0 ? "infinite" : "−infinite";
    if (value === 0) return unit ? `0 ${unit}` : "0";
    const bare = !unit || !/^[A-Za-zµ]+$/.test(unit) || ["kg", "degC", "K", "rad", "mm", "kN"].includes(unit);
    const size = Math.abs(value), [factor, prefix] = PREFIXES.find(([f]) => size >= f * 0.9995) || [1e-9, "n"];
    const text = bare ? general(value) : trim(value / factor);
    return (unit ? `${text} ${bare ? "" : prefix}${unit}` : text).replace("-", "−");
  }
  const trim = (value) => String(Number(value.toPrecision(3)));
  const general = (value) => (Math.abs(value) >= 1e-3 && Math.abs(value) < 1e5 ? trim(value) : value.toExponential(2));
  const percent = (value) => (!Number.isFinite(value) ? "undefined" : value !== 0 && value < 1e-8
    ? `${(100 * value).toExponential(1)} %`.replace("-", "−") : `${trim(100 * value)} %`);

  const axis = (c, title, extra) => ({ title: { text: title, font: { size: 12 }, standoff: 6 }, color: c.ink,
    gridcolor: c.line, zeroline: false, linecolor: c.ink, ticks: "outside", tickcolor: c.ink, automargin: true, ...extra });
  const log = { type: "log", exponentformat: "power", minor: { ticks: "outside", ticklen: 3, showgrid: false } };

  function layout(c, extra) {
    return { font: { family: css("font-family") || "system-ui, sans-serif", size: 12, color: c.ink }, paper_bgcolor: "rgba(0,0,0,0)",
      plot_bgcolor: "rgba(0,0,0,0)", margin: { l: 64, r: 14, t: 8, b: 44 }, hovermode: "closest",
      hoverlabel: { bgcolor: c.paper, bordercolor: c.ink, font: { color: c.ink } },
      legend: { orientation: "h", x: 0, y: 1.02, yanchor: "bottom", font: { size: 11 } }, ...extra };
  }
  const config = { responsive: true, displaylogo: false, modeBarButtonsToRemove: ["select2d", "lasso2d", "autoScale2d"], displayModeBar: false };
  const draw = (id, traces, view) => Plotly.react(id, traces, view, config);

  const band = (c, x0, x1, y = "paper") => ({ type: "rect", xref: "x", yref: y, x0, x1, y0: 0, y1: 1, fillcolor: c.ink, opacity: 0.08, line: { width: 0 }, layer: "below" });

  // ---- sieve -------------------------------------------------------------------------------------------------------
  function sieve(id, v) {
    const c = palette(), at = v.grains.filter((g) => g.x !== null), shelf = v.grains.filter((g) => g.x === null);
    const left = v.xRange[0], shelfX = left * (v.xRange[1] / left) ** 0.012;
    const symbol = (g) => (g.pinned ? "diamond" : "circle");
    const trace = (list, kept, name) => ({
      type: "scatter", mode: "markers+text", name, x: list.map((g) => g.x ?? shelfX), y: list.map((g) => g.y),
      customdata: list.map((g) => g.number), text: list.map((g) => g.label), textposition: "top right", textfont: { size: 10, color: c.quiet },
      hovertext: list.map((g) => plain(g.hover)), hoverinfo: "text", cliponaxis: false,
      marker: { size: 10, symbol: list.map(symbol), color: kept ? c.blue : "rgba(0,0,0,0)", line: { width: 1.6, color: kept ? c.blue : c.quiet } } });
    const traces = [trace(at.filter((g) => g.kept), true, "kept"), trace(at.filter((g) => !g.kept), false, "dropped")];
    if (shelf.length) traces.push({ ...trace(shelf, true, "always kept"), marker: { size: 11, symbol: "square", color: c.ink } });
    const shapes = [band(c, v.band[0], v.band[1])];
    const notes = [];
    if (v.edge) {
      shapes.push({ type: "line", xref: "x", yref: "paper", x0: v.edge, x1: v.edge, y0: 0, y1: 1, line: { color: c.ink, width: 1.2, dash: "dash" } });
      notes.push({ xref: "x", yref: "paper", x: Math.log10(v.edge), y: 1, text: "counted to here", showarrow: false, textangle: -90, xanchor: "right", yanchor: "top", font: { size: 11, color: c.quiet } });
    }
    draw(id, traces, layout(c, { shapes, annotations: notes, dragmode: false, showlegend: true,
      xaxis: axis(c, v.xTitle, { ...log, range: v.xRange.map(Math.log10) }), yaxis: axis(c, v.yTitle, { ...log, range: v.yRange.map(Math.log10) }) }));
  }

  // ---- response, error, count, time ---------------------------------------------------------------------------------
  function response(id, v) {
    const c = palette(), line = (y, name, color, width, dash, ax) => ({ type: "scatter", mode: "lines", name, x: v.x, y, line: { color, width, dash }, yaxis: ax,
      legendgroup: name, showlegend: ax === "y", hovertemplate: `%{x:.4g} ${plain(v.xUnit)}<br>%{y:.4g} ${ax === "y" ? plain(v.unit) : "°"}<extra>${plain(name)}</extra>` });
    const traces = [line(v.full, "full", c.ink, 2.2, "solid", "y"), line(v.small, v.name, v.color(c), 1.8, "dash", "y")];
    const two = v.fullPhase !== null;
    if (two) traces.push(line(v.fullPhase, "full", c.ink, 2.2, "solid", "y2"), line(v.smallPhase, v.name, v.color(c), 1.8, "dash", "y2"));
    traces.push({ type: "scatter", mode: "markers", name: "modes", x: v.marks.map((k) => k.x), y: v.marks.map((k) => k.y), hovertext: v.marks.map((k) => plain(k.text)), hoverinfo: "text",
      marker: { symbol: v.marks.map((k) => (k.kept ? "triangle-down" : "triangle-down-open")), size: 8, color: c.quiet } });
    draw(id, traces, layout(c, { shapes: [band(c, v.band[0], v.band[1])],
      xaxis: axis(c, v.xTitle, { ...log, anchor: two ? "y2" : "y", autorange: v.reversed ? "reversed" : true }),
      yaxis: axis(c, v.yTitle, { ...log, domain: two ? [0.36, 1] : [0, 1] }), ...(two ? { yaxis2: axis(c, "phase, °", { domain: [0, 0.28], dtick: 90 }) } : {}) }));
  }

  function error(id, v) {
    const c = palette(), traces = [];
    if (v.guaranteed) traces.push({ type: "scatter", mode: "lines", name: "guaranteed", x: v.x, y: v.guaranteed, fill: "tozeroy", fillcolor: fade(c.purple), line: { color: c.purple, width: 2 },
      hovertemplate: "%{x:.4g}<br>at most %{y:.3g}<extra>guaranteed</extra>" });
    traces.push({ type: "scatter", mode: "lines+markers", name: "measured", x: v.x, y: v.measured, line: { color: c.purple, width: 0.8 }, marker: { size: 3.5, color: c.purple },
      hovertemplate: "%{x:.4g}<br>%{y:.3g}<extra>measured</extra>" });
    if (v.spots.length) traces.push({ type: "scatter", mode: "markers", name: "spot checks", x: v.spots.map((s) => s.x), y: v.spots.map((s) => s.y), marker: { symbol: "x", size: 8, color: c.ink } });
    const shapes = [band(c, v.band[0], v.band[1])];
    if (v.tolerance) shapes.push({ type: "line", xref: "paper", yref: "y", x0: 0, x1: 1, y0: v.tolerance, y1: v.tolerance, line: { color: c.vermilion, width: 1.4, dash: "dashdot" } });
    const notes = v.tolerance ? [{ xref: "paper", yref: "y", x: 1, y: Math.log10(v.tolerance), text: "tolerance", showarrow: false, xanchor: "right", yanchor: "bottom", font: { size: 11, color: c.vermilion } }] : [];
    const yaxis = v.linear ? axis(c, v.yTitle) : axis(c, v.yTitle, { ...log, ...(v.range ? { range: v.range } : {}) });
    draw(id, traces, layout(c, { shapes, annotations: notes, xaxis: axis(c, v.xTitle, { ...log, autorange: v.reversed ? "reversed" : true }), yaxis }));
  }
  const fade = (hex) => `rgba(${[1, 3, 5].map((i) => parseInt(hex.slice(i, i + 2), 16)).join(",")},0.28)`;

  function count(id, v) {
    const c = palette(), colors = [c.blue, c.vermilion, c.green], dashes = ["solid", "dash", "dashdot"];
    const traces = v.curves.map((curve, i) => ({ type: "scatter", mode: curve.certainty === "measured" ? "lines+markers" : "lines", name: `${plain(curve.name)}, ${curve.certainty}`, x: curve.x, y: curve.y,
      fill: curve.certainty === "guaranteed" ? "tozeroy" : "none", line: { color: colors[i % 3], width: 1.4, dash: curve.certainty === "estimated" ? "dash" : dashes[i % 3] }, marker: { size: 4.5 },
      hovertemplate: `%{x} kept<br>%{y:.3g}<extra>${plain(curve.name)}</extra>` }));
    if (v.floor) traces.push({ type: "scatter", mode: "lines", name: "no model of this order can do better", x: v.floor.x, y: v.floor.y, line: { color: c.ink, width: 1.2, dash: "dot" } });
    const shapes = [{ type: "line", xref: "x", yref: "paper", x0: v.now, x1: v.now, y0: 0, y1: 1, line: { color: c.blue, width: 2 } }];
    if (v.tolerance) shapes.push({ type: "line", xref: "paper", yref: "y", x0: 0, x1: 1, y0: v.tolerance, y1: v.tolerance, line: { color: c.vermilion, width: 1.4, dash: "dashdot" } });
    draw(id, traces, layout(c, { shapes, xaxis: axis(c, v.xTitle, { rangemode: "tozero" }), yaxis: axis(c, v.yTitle, log) }));
  }

  function time(id, v) {
    const c = palette(), line = (y, name, color, width, dash) => ({ type: "scatter", mode: "lines", name, x: v.t, y, line: { color, width, dash }, hovertemplate: `%{x:.4g} ${plain(v.tUnit)}<br>%{y:.4g} ${plain(v.unit)}<extra>${plain(name)}</extra>` });
    const traces = [line(v.full, `full, ${v.certainty}`, c.ink, 2.2, v.certainty === "estimated" ? "dash" : "solid"), line(v.small, v.name, v.color(c), 1.6, "dash")];
    if (v.band) {
      const edge = (sign) => v.small.map((y, i) => y + sign * v.band[i]);
      traces.unshift({ type: "scatter", mode: "lines", x: v.t, y: edge(1), line: { width: 0 }, showlegend: false, hoverinfo: "skip" },
        { type: "scatter", mode: "lines", name: "guaranteed band", x: v.t, y: edge(-1), fill: "tonexty", fillcolor: fade(c.purple), line: { width: 0 }, hoverinfo: "skip" });
    }
    // The curves set the scale: the band is wide in the first instant, where the tail has not yet answered.
    const seen = [...v.full, ...v.small].filter(Number.isFinite), low = Math.min(...seen), high = Math.max(...seen), room = 0.08 * (high - low || 1);
    draw(id, traces, layout(c, { xaxis: axis(c, `time, ${v.tUnit}`), yaxis: axis(c, v.yTitle, { range: [low - room, high + room] }) }));
  }

  // ---- poles and coupling -------------------------------------------------------------------------------------------
  function poles(id, v) {
    const c = palette(), trace = (list, name, kept) => ({ type: "scatter", mode: "markers", name, x: list.map((q) => q.x), y: list.map((q) => q.y), customdata: list.map((q) => q.number), hovertext: list.map((q) => plain(q.text)), hoverinfo: "text",
      marker: { size: 9, symbol: kept ? "circle" : "circle-open", color: kept ? c.blue : c.quiet, line: { width: 1.5 } } });
    draw(id, [trace(v.points.filter((q) => q.kept), "kept", true), trace(v.points.filter((q) => !q.kept), "dropped", false)],
      layout(c, { xaxis: axis(c, v.xTitle, v.logX ? log : {}), yaxis: axis(c, v.yTitle, v.logY ? log : {}) }));
  }

  function coupling(id, v) {
    const c = palette();
    draw(id, [{ type: "heatmap", x: v.columns.map(plain), y: v.rows, z: v.z, zmin: -3, zmax: 0, colorscale: [[0, c.paper], [1, c.blue]], xgap: 2, ygap: 1,
      customdata: v.share, hovertemplate: "mode %{y}, %{x}<br>%{customdata:.3p} of the largest<extra></extra>",
      colorbar: { thickness: 10, tickvals: [-3, -2, -1, 0], ticktext: ["0.1 %", "1 %", "10 %", "100 %"], title: { text: "share", side: "right" }, outlinewidth: 0 } }],
    layout(c, { xaxis: axis(c, "", { type: "category", ticks: "", tickangle: -35 }), yaxis: axis(c, "mode", { type: "category", autorange: "reversed", ticks: "", nticks: 20 }) }));
  }

  return { sieve, response, error, count, time, poles, coupling, engineering, percent, plain, palette };
})();
