"use strict";
// What all pages of records share: the view from above, the charts over time, the transport, tables.
const DASHES = ["solid", "dash", "dashdot", "dot", "longdash", "longdashdot"];
const STROKES = ["", "7 4", "7 3 2 3", "2 3", "11 4", "11 3 2 3"];
const DEG = 180 / Math.PI;
const OPTIONS = { displaylogo: false, displayModeBar: false, scrollZoom: false };
const MARGIN = { l: 46, r: 12, t: 4, b: 38 };
const css = (name) => getComputedStyle(document.documentElement).getPropertyValue(name).trim();
const safe = (text) => String(text).replace(/&/g, "&amp;").replace(/</g, "&lt;").replace(/>/g, "&gt;");
const dash = (k) => DASHES[(k + Math.floor(k / 6)) % 6]; // beyond six robots colour and line style part company

function colour(k) { return css("--r" + (k % 6)); }
function shortLabels(names) {
  const numbers = names.map((name) => (name.match(/(\d+)$/) || [])[1]);
  const distinct = numbers.every(Boolean) && new Set(numbers).size === names.length;
  return distinct ? numbers : names.map((_, k) => String(k + 1));
}
function figure(value, digits, unit) {
  if (value === null || value === undefined) return "–";
  const text = Number(value).toFixed(digits).replace(/^-(0\.?0*)$/, "$1").replace("-", "−");
  return unit ? text + "\u202f" + unit : text;
}
function make(tag, content, parent, cls) {
  const node = document.createElement(tag);
  if (content !== null && content !== undefined) node.textContent = content;
  if (cls) node.className = cls;
  if (parent) parent.appendChild(node);
  return node;
}
function largest(values) {
  const there = Object.values(values || {}).filter((value) => value !== null).map(Math.abs);
  return there.length ? Math.max(...there) : null;
}

function wrapped(text) {
  return safe(text).replace(/(.{40,60}?) /g, "$1<br>");
}
function base(plot) {
  return {
    // sizes are given and not left to Plotly, which would measure too late for printing
    width: plot.clientWidth, height: plot.clientHeight, uirevision: "keeps its zoom",
    paper_bgcolor: "rgba(0,0,0,0)", plot_bgcolor: "rgba(0,0,0,0)", showlegend: false,
    font: { family: getComputedStyle(document.body).fontFamily, size: 12, color: css("--ink") },
    hoverlabel: { bgcolor: css("--panel"), bordercolor: css("--line"), font: { color: css("--ink"), size: 12 } },
    dragmode: window.innerWidth < 700 ? false : "pan",
  };
}
function axis(extra) {
  return Object.assign({ gridcolor: css("--faint"), zerolinecolor: css("--line"), linecolor: css("--line"),
    tickfont: { color: css("--soft"), size: 11 }, zeroline: false, automargin: false }, extra);
}
function swatch(k) {
  const svg = document.createElementNS("http://www.w3.org/2000/svg", "svg");
  const line = document.createElementNS("http://www.w3.org/2000/svg", "line");
  svg.setAttribute("viewBox", "0 0 26 10"); svg.setAttribute("aria-hidden", "true");
  Object.entries({ x1: 0, x2: 26, y1: 5, y2: 5, "stroke-width": 3, "stroke-dasharray": STROKES[DASHES.indexOf(dash(k))] }).forEach(([n, v]) => line.setAttribute(n, v));
  line.style.stroke = "var(--r" + (k % 6) + ")";
  svg.appendChild(line);
  return svg;
}
function tile(label, value, unit, note, bad) {
  const box = make("div", null, document.getElementById("tiles"), "tile" + (bad ? " bad" : ""));
  make("span", label, box);
  const b = make("b", value, box);
  if (unit) make("small", unit, b);
  make("span", note, box);
}
function asCode(row) {
  const cell = row.firstChild, text = cell.textContent;
  cell.textContent = ""; make("code", text, cell);
}
// A table with a head; numbers: whether all columns but the first hold numbers.
function table(node, head, rows, numbers) {
  const top = make("tr", null, make("thead", null, node));
  head.forEach((text, n) => make("th", text, top, n && numbers ? "number" : ""));
  const body = make("tbody", null, node);
  return rows.map((cells) => {
    const row = make("tr", null, body);
    cells.forEach((cell, n) => make(n ? "td" : "th", cell, row, n && numbers ? "number" : ""));
    return row;
  });
}

// The robots of a record from above and their charts over time. Elements: top, charts, cursor, robots, each with
// options.suffix behind its id; a page without charts leaves them out.
// options: rows (charts: title, series(k), digits, unit, weight), trail (seconds; all that was driven when left out),
//   spans ([{first, last, name}] shaded in the charts), axisTitle, origin (added to the times of this record).
function makeStage(run, options) {
  const count = run.names.length, samples = run.times.length;
  const robots = run.names.map((_, k) => k), labels = shortLabels(run.names);
  const element = (id) => document.getElementById(id + (options.suffix || ""));
  const top = element("top"), charts = element("charts"), bounded = run.minimum !== null;
  let time = 0, chosen = -1, moving = {}; // moving: kind -> indices of its traces

  // ---- where everybody is at a moment -----------------------------------------------------------------
  function at(t) {
    let low = 0, high = samples - 1;
    while (high - low > 1) { const middle = (low + high) >> 1; if (run.times[middle] <= t) low = middle; else high = middle; }
    const span = run.times[high] - run.times[low];
    return { low, high, part: span > 0 ? Math.min(Math.max((t - run.times[low]) / span, 0), 1) : 0 };
  }
  function between(series, w) {
    const a = series[w.low], b = series[w.high];
    return a === null || b === null ? null : a + w.part * (b - a);
  }
  function nearer(w) { return w.part < 0.5 ? w.low : w.high; }
  function planAt(t) {
    let found = -1;
    for (let n = 0; n < run.plans.times.length && run.plans.times[n] <= t + 1e-6; n += 1) found = n;
    // a plan that is half a second old says nothing about this moment
    return found >= 0 && t - run.plans.times[found] < 0.5 ? found : -1;
  }
  function outlineAt(k, x, y, heading) {
    if (x === null || y === null || heading === null) return { x: [null], y: [null] };
    const c = Math.cos(heading), s = Math.sin(heading), corners = run.corners[k].concat([run.corners[k][0]]);
    return { x: corners.map((p) => x + c * p[0] - s * p[1]), y: corners.map((p) => y + s * p[0] + c * p[1]) };
  }
  function frontAt(k, x, y, heading) {
    if (x === null || y === null || heading === null) return { x: [null], y: [null] };
    const [a, b, , d] = run.corners[k]; // front left, rear left, rear right, front right
    const length = a[0] - b[0], middle = (a[1] + d[1]) / 2, half = (a[1] - d[1]) / 2;
    const local = [[a[0] - 0.08 * length, middle], [a[0] - 0.3 * length, middle + 0.6 * half], [a[0] - 0.3 * length, middle - 0.6 * half]];
    local.push(local[0]);
    const c = Math.cos(heading), s = Math.sin(heading);
    return { x: local.map((p) => x + c * p[0] - s * p[1]), y: local.map((p) => y + s * p[0] + c * p[1]) };
  }
  function joined(pieces) {
    const all = { x: [], y: [] };
    pieces.forEach((piece) => { all.x.push(...piece.x, null); all.y.push(...piece.y, null); });
    return all;
  }
  function moment(t) {
    const w = at(t), n = nearer(w), plan = planAt(t);
    const poses = robots.map((k) => [between(run.x[k], w), between(run.y[k], w), between(run.heading[k], w)]);
    const clearance = between(run.nearest.clearance, w), line = run.nearest.line[n];
    return { w, n, plan, poses, clearance, line, pair: run.nearest.pair[n] };
  }

  // ---- from above -------------------------------------------------------------------------------------
  function topTraces() {
    const traces = [], plain = { mode: "lines", hoverinfo: "skip", type: "scatter", showlegend: false };
    const add = (kind, trace) => { (moving[kind] = moving[kind] || []).push(traces.length); traces.push(Object.assign({}, plain, trace)); };
    moving = {};
    (run.areas || []).forEach((area) => {
      const tone = css(area.kind === "out" ? "--bad" : "--soft");
      add("areas", { x: area.x, y: area.y, fill: "toself", fillcolor: tone, opacity: area.kind === "out" ? 0.25 : 0.12, line: { color: tone, width: 1.5 } });
      add("areas", { x: [Math.min(...area.x)], y: [Math.max(...area.y)], mode: "text", textposition: "bottom right", text: [safe(area.words)], textfont: { size: 11, color: tone } });
    });
    add("starts", Object.assign(joined(robots.map((k) => outlineAt(k, run.x[k][0], run.y[k][0], run.heading[k][0]))),
      { line: { color: css("--soft"), width: 1 }, opacity: 0.55 }));
    robots.forEach((k) => {
      const end = run.ends[k];
      add("ends", Object.assign(joined([outlineAt(k, ...end), frontAt(k, ...end)]), { line: { color: colour(k), width: 1.4, dash: "dot" } }));
    });
    robots.forEach((k) => add("paths", { x: run.x[k], y: run.y[k], line: { color: colour(k), width: 1 }, opacity: 0.35,
      hoverinfo: "text", text: run.times.map((t) => safe(run.names[k]) + " at " + figure(t, 2, "s")) }));
    add("edges", { x: [null], y: [null], line: { color: css("--soft"), width: 1.2 } });
    robots.forEach((k) => add("trails", { x: [null], y: [null], line: { color: colour(k), width: 2.4 } }));
    robots.forEach((k) => add("plans", { x: [null], y: [null], line: { color: colour(k), width: 2, dash: "2px,4px" } }));
    [["nearest", "--ink"], ["below", "--bad"]].forEach(([kind, name]) => add(kind, { x: [null], y: [null], line: { color: css(name), width: 2.5 } }));
    robots.forEach((k) => add("bodies", { x: [null], y: [null], fill: "toself", fillcolor: colour(k), line: { color: css("--ink"), width: 1 } }));
    add("fronts", { x: [null], y: [null], fill: "toself", fillcolor: css("--panel"), line: { color: css("--panel"), width: 0 } });
    add("labels", { x: [null], y: [null], mode: "text", textfont: { size: labelSize(), color: robots.map((k) => (k % 6 < 3 ? "#ffffff" : "#101010")) }, text: labels });
    [["nearest", "--ink"], ["below", "--bad"]].forEach(([kind, name]) => add(kind, { x: [null], y: [null], mode: "text", textposition: "middle right",
      textfont: { size: 12, color: css(name), shadow: "auto" }, text: [""] }));
    return traces;
  }
  function extent() {
    const box = [Infinity, -Infinity, Infinity, -Infinity], reach = Math.max(...run.corners.flat(2).map(Math.abs));
    const take = (x, y) => {
      if (x === null || y === null) return;
      box[0] = Math.min(box[0], x - reach); box[1] = Math.max(box[1], x + reach);
      box[2] = Math.min(box[2], y - reach); box[3] = Math.max(box[3], y + reach);
    };
    robots.forEach((k) => { run.x[k].forEach((x, n) => take(x, run.y[k][n])); take(run.ends[k][0], run.ends[k][1]); });
    const spare = 0.03 * Math.max(box[1] - box[0], box[3] - box[2]);
    return box.every(Number.isFinite) ? box.map((edge, n) => edge + (n % 2 ? spare : -spare)) : [-1, 1, -1, 1];
  }
  function labelSize() {
    const box = extent(), scale = Math.min(top.clientWidth / (box[1] - box[0]), top.clientHeight / (box[3] - box[2]));
    const width = Math.min(...run.corners.map((c) => Math.min(c[0][0] - c[1][0], c[0][1] - c[3][1])));
    return Math.max(Math.min(0.9 * scale * width, 12), 1); // pixels; too small to read is better than in the way
  }
  function topLayout() {
    const box = extent();
    return Object.assign(base(top), {
      margin: { l: 38, r: 8, t: 6, b: 34 }, hovermode: "closest",
      xaxis: axis({ range: [box[0], box[1]], ticksuffix: " m" }),
      yaxis: axis({ range: [box[2], box[3]], scaleanchor: "x", scaleratio: 1 }),
    });
  }
  function edgesAt(when) {
    const passed = (run.edge_changes || []).filter((change) => change[0] <= when);
    return passed.length ? passed[passed.length - 1][1] : run.edges;
  }
  function drawMoment() {
    const m = moment(time), upTo = m.w.low + 1, put = [], which = [];
    const from = options.trail ? at(time - options.trail).low : 0;
    const set = (kind, n, piece) => { which.push(moving[kind][n]); put.push(piece); };
    set("edges", 0, joined(edgesAt(time).map((e) => ({ x: [m.poses[e[0]][0], m.poses[e[1]][0]], y: [m.poses[e[0]][1], m.poses[e[1]][1]] }))));
    robots.forEach((k) => {
      const [x, y, heading] = m.poses[k];
      set("trails", k, { x: run.x[k].slice(from, upTo).concat([x]), y: run.y[k].slice(from, upTo).concat([y]) });
      set("plans", k, m.plan >= 0 ? { x: run.plans.x[m.plan][k], y: run.plans.y[m.plan][k] } : { x: [null], y: [null] });
      set("bodies", k, outlineAt(k, x, y, heading));
    });
    set("fronts", 0, joined(robots.map((k) => frontAt(k, ...m.poses[k]))));
    set("labels", 0, { x: m.poses.map((p, k) => behind(k, p, 0)), y: m.poses.map((p, k) => behind(k, p, 1)) });
    const [x0, y0, x1, y1] = m.line || [null, null, null, null], below = tooNear(m);
    ["nearest", "below"].forEach((kind) => {
      const shown = m.line && (kind === "below") === below;
      set(kind, 0, shown ? { x: [x0, x1], y: [y0, y1] } : { x: [null], y: [null] });
      set(kind, 1, { x: [shown ? (x0 + x1) / 2 : null], y: [shown ? (y0 + y1) / 2 : null],
        text: ["\u2002" + figure(m.clearance, 2, "m") + (below ? ", below the minimum" : "")] });
    });
    // Animate without a redraw moves only these traces: some ten times faster than restyle. It rejects its promise
    // when the next moment comes before this one is drawn, which is what "immediate" asks for.
    Plotly.animate(top, { data: put, traces: which }, { mode: "immediate", transition: { duration: 0 }, frame: { duration: 0, redraw: false } })
      .catch(() => {});
    placeCursor();
    return m;
  }
  function tooNear(m) { return bounded && m.clearance !== null && m.clearance < run.minimum; }
  function behind(k, pose, coordinate) {
    if (pose[0] === null) return null;
    const [a, b, , d] = run.corners[k], ahead = b[0] + 0.36 * (a[0] - b[0]), left = (a[1] + d[1]) / 2;
    const c = Math.cos(pose[2]), s = Math.sin(pose[2]);
    return coordinate === 0 ? pose[0] + c * ahead - s * left : pose[1] + s * ahead + c * left;
  }
  // Looks at a box [left, right, bottom, top] in metres, or at everything.
  function lookAt(box) {
    const [left, right, bottom, upper] = box || extent();
    Plotly.relayout(top, { "xaxis.range": [left, right], "yaxis.range": [bottom, upper] }).then(drawMoment);
  }
  // The box round where everybody was between two moments.
  function boxOf(first, last) {
    const box = [Infinity, -Infinity, Infinity, -Infinity], reach = 1.2 * Math.max(...run.corners.flat(2).map(Math.abs));
    run.times.forEach((t, n) => {
      if (t < first || t > last) return;
      robots.forEach((k) => {
        if (run.x[k][n] === null) return;
        box[0] = Math.min(box[0], run.x[k][n] - reach); box[1] = Math.max(box[1], run.x[k][n] + reach);
        box[2] = Math.min(box[2], run.y[k][n] - reach); box[3] = Math.max(box[3], run.y[k][n] + reach);
      });
    });
    return box.every(Number.isFinite) ? box : null;
  }

  // ---- against time -----------------------------------------------------------------------------------
  const marked = run.cautions.length + run.events.length > 0, clearanceRow = options.rows ? options.rows.length : 0;
  const rows = (options.rows || []).concat([{ title: "Clearance, m: the nearest two robots at each moment", weight: 5 }]);
  const clearanceAxis = yName(clearanceRow), warnedAxis = yName(clearanceRow + 1);
  if (marked) rows.push({ title: "Warnings and events", weight: 1 + 0.5 * new Set(run.cautions.map((c) => c.code)).size });
  shareHeight(rows);

  function placeCursor() { if (charts) putCursor(charts, element("cursor"), time); }
  function chartTraces() {
    const traces = [];
    rows.slice(0, clearanceRow).forEach((row, n) => robots.forEach((k) => traces.push({
      type: "scatter", mode: "lines", x: run.times, y: row.series(k), xaxis: "x", yaxis: yName(n), name: safe(run.names[k]),
      line: { color: colour(k), width: 1.8, dash: dash(k) }, hovertemplate: "%{y:." + row.digits + "f}" + row.unit })));
    traces.push({ type: "scatter", mode: "lines", x: run.times, y: run.nearest.clearance, xaxis: "x", yaxis: clearanceAxis, name: "nearest two",
      line: { color: css("--ink"), width: 2 }, customdata: run.nearest.pair.map((p) => (p[0] < 0 ? "" : safe(run.names[p[0]] + " and " + run.names[p[1]]))),
      hovertemplate: "%{y:.2f} m<br>%{customdata}" });
    if (marked) traces.push(...cautionTraces());
    return traces;
  }
  function cautionTraces() {
    const end = run.times[samples - 1], codes = [...new Set(run.cautions.map((c) => c.code))];
    const bars = run.cautions.map((c) => ({ type: "scatter", mode: "lines", xaxis: "x", yaxis: warnedAxis, name: "", hoverinfo: "text",
      x: [c.first, c.last === null ? end : c.last], y: [codes.indexOf(c.code), codes.indexOf(c.code)],
      line: { color: css(c.level >= 2 ? "--bad" : "--r4"), width: 9 }, text: wrapped(c.code + (c.subject ? ": " + c.subject : "") + ", " + c.text) }));
    return bars.concat([{ type: "scatter", mode: "markers", xaxis: "x", yaxis: warnedAxis, x: run.events.map((e) => e.time), y: run.events.map(() => -1),
      name: "", hoverinfo: "text", text: run.events.map((e) => wrapped(e.text)), marker: { symbol: "diamond", size: 9, color: css("--ink") } }]);
  }
  function cautionRange() { return [-1.7, new Set(run.cautions.map((c) => c.code)).size - 0.3]; }
  function cautionNames(layout) {
    [...new Set(run.cautions.map((c) => c.code))].forEach((code, n) => layout.annotations.push({ text: safe(code), xref: "paper", yref: warnedAxis, x: 0, y: n,
      xanchor: "left", showarrow: false, font: { size: 11, color: css("--soft") } }));
    run.events.forEach((e) => layout.shapes.push({ type: "line", xref: "x", yref: "paper", x0: e.time, x1: e.time, y0: 0, y1: 1,
      line: { color: css("--soft"), width: 1, dash: "dot" }, layer: "below" }));
  }
  function chartLayout() {
    const margin = 0.012 * (run.times[samples - 1] - run.times[0]) || 0.5; // so that marks at the ends are seen whole
    const layout = Object.assign(base(charts), { hovermode: "x", margin: MARGIN, annotations: [], shapes: [] });
    layout.xaxis = timeAxis(options.axisTitle, [run.times[0] - margin, run.times[samples - 1] + margin], rows.length);
    rows.forEach((row, n) => addRow(layout, row, n));
    rows.slice(0, clearanceRow).forEach((row, n) => Object.assign(layout[axisName(n)], row.zero ? { rangemode: "tozero" } : {}));
    const clear = run.nearest.clearance.filter((v) => v !== null);
    Object.assign(layout[axisName(clearanceRow)], { range: [0, 1.12 * Math.max(run.minimum || 0, ...clear, 0.1)] });
    if (bounded) addMinimum(layout, clearanceAxis, run.minimum);
    (options.spans || []).forEach((s) => {
      layout.shapes.push({ type: "rect", xref: "x", yref: "paper", x0: s.first, x1: s.last, y0: 0, y1: 1, fillcolor: css("--accent"), opacity: 0.09, line: { width: 0 }, layer: "below" });
    });
    if (marked) {
      Object.assign(layout[axisName(clearanceRow + 1)], { showticklabels: false, showgrid: false, range: cautionRange(), zeroline: false });
      cautionNames(layout);
    }
    return layout;
  }

  function drawAll() {
    Plotly.react(top, topTraces(), topLayout(), Object.assign({}, OPTIONS, { scrollZoom: window.innerWidth >= 700 }));
    if (charts) Plotly.react(charts, chartTraces(), chartLayout(), OPTIONS);
    drawMoment();
    emphasise();
  }
  function emphasise() {
    const strong = (k, full) => (chosen < 0 || chosen === k ? full : 0.15);
    ["ends", "trails", "plans", "bodies"].forEach((kind) => Plotly.restyle(top, { opacity: robots.map((k) => strong(k, 1)) }, moving[kind]));
    Plotly.restyle(top, { opacity: robots.map((k) => strong(k, 0.35)) }, moving.paths);
    const lines = rows.slice(0, clearanceRow).map((_, n) => robots.map((k) => k + n * count)).flat();
    if (charts && lines.length) Plotly.restyle(charts, { opacity: lines.map((n) => strong(n % count, 1)) }, lines);
    element("robots").querySelectorAll("button").forEach((b, k) => b.setAttribute("aria-pressed", String(k === chosen)));
  }
  robots.forEach((k) => {
    const button = make("button", null, element("robots"));
    button.type = "button"; button.append(swatch(k), document.createTextNode(run.names[k]));
    button.addEventListener("click", () => { chosen = chosen === k ? -1 : k; emphasise(); });
  });

  return {
    drawAll, lookAt, boxOf, charts, placeCursor, tooNear, first: run.times[0], last: run.times[samples - 1],
    show(t) { time = t; return drawMoment(); },
    choose(k) { chosen = k; emphasise(); },
    // What is worth a word at a moment, as it was drawn.
    words(m) {
      const parts = [];
      if (m.clearance !== null) parts.push("nearest " + run.names[m.pair[0]] + " and " + run.names[m.pair[1]] + ", " + figure(m.clearance, 2, "m"));
      if (m.plan >= 0 && run.plans.rate[m.plan] !== null && run.plans.rate[m.plan] < 0.995) parts.push("progress at " + figure(100 * run.plans.rate[m.plan], 0, "%"));
      run.cautions.filter((c) => c.first <= time && (c.last === null || time <= c.last)).forEach((c) => parts.push("▲ " + c.code));
      return parts;
    },
  };
}

// ---- charts over time, whoever draws them ---------------------------------------------------------------
function yName(n) { return "y" + (n ? n + 1 : ""); }
function axisName(n) { return "yaxis" + (n ? n + 1 : ""); }
function shareHeight(rows) {
  const gap = 1.3, all = rows.reduce((sum, row) => sum + row.weight + gap, 0);
  let from = 1;
  rows.forEach((row) => { row.top = from - gap / all; row.bottom = row.top - row.weight / all; from = row.bottom; });
  rows[rows.length - 1].bottom = Math.max(rows[rows.length - 1].bottom, 0);
}
function addRow(layout, row, n) {
  layout[axisName(n)] = axis({ domain: [row.bottom, row.top], anchor: "x", fixedrange: true, nticks: 5 });
  layout.annotations.push({ text: row.title, xref: "paper", yref: "paper", x: 0, y: row.top, xanchor: "left", yanchor: "bottom",
    xshift: -40, showarrow: false, font: { size: 12, color: css("--ink") } });
}
function timeAxis(title, range, count) {
  return axis({ title: { text: title, font: { size: 11, color: css("--soft") }, standoff: 6 }, range, anchor: yName(count - 1), showspikes: false });
}
function addMinimum(layout, yref, minimum) {
  layout.shapes.push({ type: "rect", xref: "paper", yref, x0: 0, x1: 1, y0: 0, y1: minimum, fillcolor: css("--bad"), opacity: 0.12, line: { width: 0 }, layer: "below" });
  layout.shapes.push({ type: "line", xref: "paper", yref, x0: 0, x1: 1, y0: minimum, y1: minimum, line: { color: css("--bad"), width: 1.5, dash: "dash" } });
  layout.annotations.push({ text: "site's minimum " + figure(minimum, 2, "m"), xref: "paper", yref, x: 1, y: minimum,
    xanchor: "right", yanchor: "top", showarrow: false, font: { size: 11, color: css("--bad") } });
}
// A line of our own over all charts: moving one of Plotly's shapes would draw them all anew.
function putCursor(charts, cursor, time) {
  const range = charts.layout.xaxis.range.map(Number), width = charts.clientWidth - MARGIN.l - MARGIN.r;
  const part = (time - range[0]) / (range[1] - range[0]);
  cursor.style.left = MARGIN.l + part * width + "px";
  cursor.style.visibility = part >= 0 && part <= 1 ? "visible" : "hidden";
}

// ---- time -----------------------------------------------------------------------------------------------
// Slider, play button and marks. show(t) draws a moment and returns [words for the read-out, whether it is bad].
function makeTransport(first, last, show) {
  const element = (id) => document.getElementById(id), slider = element("time");
  let time = first, playing = false;
  function range(from, to) {
    [first, last] = [from, to];
    Object.assign(slider, { min: String(first), max: String(last), step: "0.01" });
  }
  range(first, last);
  function goTo(t) {
    time = Math.min(Math.max(t, first), last);
    slider.value = String(time);
    const [words, bad] = show(time);
    element("now").textContent = figure(time, 2, "s");
    element("readout").textContent = words.join(" · ");
    element("readout").className = "readout" + (bad ? " bad" : "");
    slider.setAttribute("aria-valuetext", figure(time, 2) + " seconds");
    document.querySelectorAll("tr[data-first]").forEach((row) => {
      const from = Number(row.dataset.first), to = row.dataset.last === "" ? last : Number(row.dataset.last);
      row.classList.toggle("now", from <= time && time <= to);
    });
  }
  function play(on) {
    playing = on;
    element("play").setAttribute("aria-label", on ? "Pause" : "Play");
    element("play-icon").setAttribute("d", on ? "M3 2h3.5v12H3zM9.5 2H13v12H9.5z" : "M4 2l9 6-9 6z");
    if (!on) return;
    if (time >= last - 1e-9) time = first;
    let before = performance.now();
    const step = (now) => {
      if (!playing) return;
      const next = time + Number(element("pace").value) * Math.min(now - before, 250) / 1000;
      before = now;
      goTo(next);
      if (next >= last) play(false); else requestAnimationFrame(step);
    };
    requestAnimationFrame(step);
  }
  slider.addEventListener("input", () => { play(false); goTo(Number(slider.value)); });
  element("play").addEventListener("click", () => play(!playing));
  document.addEventListener("keydown", (event) => {
    if (event.code === "Space" && !/^(BUTTON|SELECT|INPUT)$/.test(event.target.tagName)) { event.preventDefault(); play(!playing); }
  });
  const place = (t) => 100 * (Math.min(Math.max(t, first), last) - first) / Math.max(last - first, 1e-9);
  return {
    goTo, range, now: () => time,
    // A mark on the time line from one moment to another (to the end: null).
    mark(from, to, kind, title) {
      const mark = make("i", null, element("marks"), kind);
      mark.style.left = place(from) + "%"; mark.title = title;
      if (kind !== "event") mark.style.width = place(to === null ? last : to) - place(from) + "%";
    },
  };
}
// A row of a table that jumps to its moment, and is lit while it lasts.
function jumps(row, from, to, goTo) {
  row.dataset.first = from; row.dataset.last = to === null ? "" : to;
  row.style.cursor = "pointer"; row.tabIndex = 0;
  row.addEventListener("click", () => goTo(from));
  row.addEventListener("keydown", (event) => { if (event.key === "Enter") goTo(from); });
}
// Draws everything anew where colours or sizes change.
function keepDrawn(drawAll) {
  window.matchMedia("(prefers-color-scheme: dark)").addEventListener("change", drawAll);
  let waiting = 0;
  window.addEventListener("resize", () => { cancelAnimationFrame(waiting); waiting = requestAnimationFrame(drawAll); });
  ["beforeprint", "afterprint"].forEach((name) => window.addEventListener(name, () => {
    document.documentElement.classList.toggle("printing", name === "beforeprint");
    drawAll();
  }));
}
// Warnings, events and other happenings, [{first, last, kind, who, text}], in the order of time.
function happenings(items, goTo) {
  items.sort((a, b) => a.first - b.first);
  if (!items.length) { make("caption", "Nothing was warned of.", document.getElementById("cautions")); return; }
  const span = (i) => figure(i.first, 1) + (i.last === i.first ? "" : i.last === null ? " to the end" : " to " + figure(i.last, 1)) + "\u202fs";
  table(document.getElementById("cautions"), ["When", "What", "Who", "In words"], items.map((i) => [span(i), i.kind, i.who, i.text]))
    .forEach((row, n) => jumps(row, items[n].first, items[n].last, goTo));
}
function warned(run) {
  return run.cautions.map((c) => ({ first: c.first, last: c.last, kind: (c.level >= 2 ? "✕ " : "▲ ") + c.code, who: c.subject, text: c.text }))
    .concat(run.events.map((e) => ({ first: e.time, last: e.time, kind: "◆ event", who: "", text: e.text })));
}
// A figure of each robot against its hops: sets [{turn, values, sds, open, since}], since taken off onsets. Amplitudes are shown by their size.
function drawByHop(node, title, names, sets, signed) {
  const labels = shortLabels(names), traces = [], hops = sets.some((set) => set.turn.hops);
  sets.forEach((set) => {
    const size = (name) => (set.values[name] === null || set.values[name] === undefined ? null : signed ? set.values[name] : Math.abs(set.values[name]));
    names.forEach((name, k) => {
      const hop = hops ? set.turn.hops && set.turn.hops[name] : k;
      if (size(name) === null || hop === null || hop === undefined) return;
      traces.push({ type: "scatter", mode: "markers+text", x: [hop + (set.open ? 0.12 : 0)], y: [size(name)], text: [labels[k]], textposition: "top right", textfont: { size: 10, color: css("--soft") },
        error_y: { type: "data", array: [2 * set.sds[name]], color: colour(k), thickness: 1.5, width: 5 },
        marker: { color: colour(k), size: 10, symbol: (set.open ? "square-open" : "circle"), line: { color: colour(k), width: 2 } },
        hovertemplate: safe(name) + ": %{y:.3f} ± " + figure(2 * set.sds[name], 3) + "<extra></extra>" });
    });
    if (!hops) return;
    const rows = set.turn.by_hop;
    traces.push({ type: "scatter", mode: "lines", x: rows.map((row) => row.hop + (set.open ? 0.12 : 0)), hoverinfo: "skip",
      y: rows.map((row) => (signed ? row.onset_s - (set.since || 0) : row.amplitude_rad_per_s)), line: { color: css("--soft"), width: 1.2, dash: set.open ? "dash" : "solid" } });
  });
  const layout = Object.assign(base(node), { margin: { l: 52, r: 10, t: 26, b: 38 }, hovermode: "closest", dragmode: false,
    title: { text: title, x: 0, xref: "paper", xanchor: "left", font: { size: 12, color: css("--ink") }, yref: "container", y: 0.97 } });
  layout.xaxis = axis({ title: { text: hops ? "hops along the neighbour graph" : "robots, by name", font: { size: 11, color: css("--soft") } }, dtick: 1, fixedrange: true });
  layout.yaxis = axis({ fixedrange: true, nticks: 6 });
  const highest = Math.max(0, ...traces.filter((trace) => trace.error_y).map((trace) => trace.y[0] + trace.error_y.array[0]));
  if (!signed) layout.yaxis.range = [0, 1.2 * highest || 1]; // room for the labels above the points
  if (!hops) Object.assign(layout.xaxis, { tickvals: names.map((_, k) => k), ticktext: labels });
  Plotly.react(node, traces, layout, OPTIONS);
}
