"use strict";
(function () {
  const run = JSON.parse(document.getElementById("run").textContent);
  const count = run.names.length, samples = run.times.length;
  const DASHES = ["solid", "dash", "dashdot", "dot", "longdash", "longdashdot"];
  const STROKES = ["", "7 4", "7 3 2 3", "2 3", "11 4", "11 3 2 3"];
  const DEG = 180 / Math.PI;
  const robots = run.names.map((_, k) => k);
  const element = (id) => document.getElementById(id);
  const css = (name) => getComputedStyle(document.documentElement).getPropertyValue(name).trim();
  const safe = (text) => String(text).replace(/&/g, "&amp;").replace(/</g, "&lt;").replace(/>/g, "&gt;");
  const dash = (k) => DASHES[(k + Math.floor(k / 6)) % 6]; // beyond six robots colour and line style part company
  const labels = shortLabels(run.names);
  let time = 0, chosen = -1, playing = false;

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
  const top = element("top"), charts = element("charts");
  let moving = {}; // kind -> indices of its traces

  function topTraces() {
    const traces = [], plain = { mode: "lines", hoverinfo: "skip", type: "scatter", showlegend: false };
    const add = (kind, trace) => { (moving[kind] = moving[kind] || []).push(traces.length); traces.push(Object.assign({}, plain, trace)); };
    moving = {};
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
  function topLayout() {
    const box = extent();
    return Object.assign(base(top), {
      margin: { l: 38, r: 8, t: 6, b: 34 }, hovermode: "closest",
      xaxis: axis({ range: [box[0], box[1]], ticksuffix: " m" }),
      yaxis: axis({ range: [box[2], box[3]], scaleanchor: "x", scaleratio: 1 }),
    });
  }
  function drawMoment() {
    const m = moment(time), upTo = m.w.low + 1, put = [], which = [];
    const set = (kind, n, piece) => { which.push(moving[kind][n]); put.push(piece); };
    set("edges", 0, joined(run.edges.map((e) => ({ x: [m.poses[e[0]][0], m.poses[e[1]][0]], y: [m.poses[e[0]][1], m.poses[e[1]][1]] }))));
    robots.forEach((k) => {
      const [x, y, heading] = m.poses[k];
      set("trails", k, { x: run.x[k].slice(0, upTo).concat([x]), y: run.y[k].slice(0, upTo).concat([y]) });
      set("plans", k, m.plan >= 0 ? { x: run.plans.x[m.plan][k], y: run.plans.y[m.plan][k] } : { x: [null], y: [null] });
      set("bodies", k, outlineAt(k, x, y, heading));
    });
    set("fronts", 0, joined(robots.map((k) => frontAt(k, ...m.poses[k]))));
    set("labels", 0, { x: m.poses.map((p, k) => behind(k, p, 0)), y: m.poses.map((p, k) => behind(k, p, 1)) });
    const [x0, y0, x1, y1] = m.line || [null, null, null, null], below = m.clearance !== null && m.clearance < run.minimum;
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
    readOut(m, below);
  }
  function behind(k, pose, coordinate) {
    if (pose[0] === null) return null;
    const [a, b, , d] = run.corners[k], ahead = b[0] + 0.36 * (a[0] - b[0]), left = (a[1] + d[1]) / 2;
    const c = Math.cos(pose[2]), s = Math.sin(pose[2]);
    return coordinate === 0 ? pose[0] + c * ahead - s * left : pose[1] + s * ahead + c * left;
  }

  // ---- against time -----------------------------------------------------------------------------------
  const marked = run.cautions.length + run.events.length > 0;
  const ROWS = [
    { title: "Heading, degrees", series: (k) => run.heading[k].map((v) => (v === null ? null : v * DEG)), digits: 1, unit: "°", weight: 5 },
    { title: "Curvature, 1/m, left positive", series: (k) => run.curvature[k], digits: 3, unit: " 1/m", weight: 5 },
    { title: "Speed, m/s", series: (k) => run.speed[k], digits: 2, unit: " m/s", weight: 4 },
    { title: "Clearance, m: the nearest two robots at each moment", weight: 5 },
  ];
  if (marked) ROWS.push({ title: "Warnings and events", weight: 1 + 0.5 * new Set(run.cautions.map((c) => c.code)).size });
  (function share() {
    const gap = 1.3, all = ROWS.reduce((sum, row) => sum + row.weight + gap, 0);
    let from = 1;
    ROWS.forEach((row) => { row.top = from - gap / all; row.bottom = row.top - row.weight / all; from = row.bottom; });
    ROWS[ROWS.length - 1].bottom = Math.max(ROWS[ROWS.length - 1].bottom, 0);
  })();
  const yName = (n) => "y" + (n ? n + 1 : "");

  const MARGIN = { l: 46, r: 12, t: 4, b: 38 };
  function placeCursor() {
    // a line of our own over all charts: moving one of Plotly's shapes would draw them all anew
    const range = charts.layout.xaxis.range.map(Number), width = charts.clientWidth - MARGIN.l - MARGIN.r;
    const part = (time - range[0]) / (range[1] - range[0]), cursor = element("cursor");
    cursor.style.left = MARGIN.l + part * width + "px";
    cursor.style.visibility = part >= 0 && part <= 1 ? "visible" : "hidden";
  }

  function chartTraces() {
    const traces = [];
    ROWS.slice(0, 3).forEach((row, n) => robots.forEach((k) => traces.push({
      type: "scatter", mode: "lines", x: run.times, y: row.series(k), xaxis: "x", yaxis: yName(n), name: safe(run.names[k]),
      line: { color: colour(k), width: 1.8, dash: dash(k) }, hovertemplate: "%{y:." + row.digits + "f}" + row.unit })));
    traces.push({ type: "scatter", mode: "lines", x: run.times, y: run.nearest.clearance, xaxis: "x", yaxis: "y4", name: "nearest two",
      line: { color: css("--ink"), width: 2 }, customdata: run.nearest.pair.map((p) => (p[0] < 0 ? "" : safe(run.names[p[0]] + " and " + run.names[p[1]]))),
      hovertemplate: "%{y:.2f} m<br>%{customdata}" });
    if (marked) traces.push(...cautionTraces());
    return traces;
  }
  function cautionTraces() {
    const end = run.times[samples - 1], codes = [...new Set(run.cautions.map((c) => c.code))];
    const bars = run.cautions.map((c) => ({ type: "scatter", mode: "lines", xaxis: "x", yaxis: "y5", name: "", hoverinfo: "text",
      x: [c.first, c.last === null ? end : c.last], y: [codes.indexOf(c.code), codes.indexOf(c.code)],
      line: { color: css(c.level >= 2 ? "--bad" : "--r4"), width: 9 }, text: wrapped(c.code + (c.subject ? ": " + c.subject : "") + ", " + c.text) }));
    return bars.concat([{ type: "scatter", mode: "markers", xaxis: "x", yaxis: "y5", x: run.events.map((e) => e.time), y: run.events.map(() => -1),
      name: "", hoverinfo: "text", text: run.events.map((e) => wrapped(e.text)), marker: { symbol: "diamond", size: 9, color: css("--ink") } }]);
  }
  function wrapped(text) {
    return safe(text).replace(/(.{40,60}?) /g, "$1<br>");
  }
  function chartLayout() {
    const margin = 0.012 * (run.times[samples - 1] - run.times[0]) || 0.5; // so that marks at the ends are seen whole
    const layout = Object.assign(base(charts), { hovermode: "x", margin: MARGIN, annotations: [], shapes: [] });
    layout.xaxis = axis({ title: { text: "seconds since the motion began", font: { size: 11, color: css("--soft") }, standoff: 6 },
      range: [run.times[0] - margin, run.times[samples - 1] + margin], anchor: yName(ROWS.length - 1), showspikes: false });
    ROWS.forEach((row, n) => {
      layout["yaxis" + (n ? n + 1 : "")] = axis({ domain: [row.bottom, row.top], anchor: "x", fixedrange: true, nticks: 5 });
      layout.annotations.push({ text: row.title, xref: "paper", yref: "paper", x: 0, y: row.top, xanchor: "left", yanchor: "bottom",
        xshift: -40, showarrow: false, font: { size: 12, color: css("--ink") } });
    });
    Object.assign(layout.yaxis3, { rangemode: "tozero" });
    const clear = run.nearest.clearance.filter((v) => v !== null);
    Object.assign(layout.yaxis4, { range: [0, 1.12 * Math.max(run.minimum, ...clear, 0.1)] });
    if (marked) Object.assign(layout.yaxis5, { showticklabels: false, showgrid: false, range: cautionRange(), zeroline: false });
    layout.shapes.push({ type: "rect", xref: "paper", yref: "y4", x0: 0, x1: 1, y0: 0, y1: run.minimum, fillcolor: css("--bad"), opacity: 0.12, line: { width: 0 }, layer: "below" });
    layout.shapes.push({ type: "line", xref: "paper", yref: "y4", x0: 0, x1: 1, y0: run.minimum, y1: run.minimum, line: { color: css("--bad"), width: 1.5, dash: "dash" } });
    layout.annotations.push({ text: "site's minimum " + figure(run.minimum, 2, "m"), xref: "paper", yref: "y4", x: 1, y: run.minimum,
      xanchor: "right", yanchor: "top", showarrow: false, font: { size: 11, color: css("--bad") } });
    if (marked) cautionNames(layout);
    return layout;
  }
  function cautionRange() { return [-1.7, new Set(run.cautions.map((c) => c.code)).size - 0.3]; }
  function cautionNames(layout) {
    [...new Set(run.cautions.map((c) => c.code))].forEach((code, n) => layout.annotations.push({ text: safe(code), xref: "paper", yref: "y5", x: 0, y: n,
      xanchor: "left", showarrow: false, font: { size: 11, color: css("--soft") } }));
    run.events.forEach((e) => layout.shapes.push({ type: "line", xref: "x", yref: "paper", x0: e.time, x1: e.time, y0: 0, y1: 1,
      line: { color: css("--soft"), width: 1, dash: "dot" }, layer: "below" }));
  }
  const OPTIONS = { displaylogo: false, displayModeBar: false, scrollZoom: false };

  function drawAll() {
    Plotly.react(top, topTraces(), topLayout(), Object.assign({}, OPTIONS, { scrollZoom: window.innerWidth >= 700 }));
    Plotly.react(charts, chartTraces(), chartLayout(), OPTIONS);
    drawMoment();
    emphasise();
  }
  function emphasise() {
    const strong = (k, full) => (chosen < 0 || chosen === k ? full : 0.15);
    ["ends", "trails", "plans", "bodies"].forEach((kind) => Plotly.restyle(top, { opacity: robots.map((k) => strong(k, 1)) }, moving[kind]));
    Plotly.restyle(top, { opacity: robots.map((k) => strong(k, 0.35)) }, moving.paths);
    const lines = robots.map((k) => [k, k + count, k + 2 * count]).flat();
    Plotly.restyle(charts, { opacity: robots.map((k) => [strong(k, 1), strong(k, 1), strong(k, 1)]).flat() }, lines);
    element("robots").querySelectorAll("button").forEach((b, k) => b.setAttribute("aria-pressed", String(k === chosen)));
  }

  // ---- time -------------------------------------------------------------------------------------------
  const slider = element("time"), first = run.times[0], last = run.times[samples - 1];
  function goTo(t) {
    time = Math.min(Math.max(t, first), last);
    slider.value = String(time);
    drawMoment();
  }
  function readOut(m, below) {
    element("now").textContent = figure(time, 2, "s");
    const parts = [];
    if (m.clearance !== null) parts.push("nearest " + run.names[m.pair[0]] + " and " + run.names[m.pair[1]] + ", " + figure(m.clearance, 2, "m"));
    if (m.plan >= 0 && run.plans.rate[m.plan] !== null && run.plans.rate[m.plan] < 0.995) parts.push("progress at " + figure(100 * run.plans.rate[m.plan], 0, "%"));
    run.cautions.filter((c) => c.first <= time && (c.last === null || time <= c.last)).forEach((c) => parts.push("▲ " + c.code));
    element("readout").textContent = parts.join(" · ");
    element("readout").className = "readout" + (below ? " bad" : "");
    slider.setAttribute("aria-valuetext", figure(time, 2) + " seconds");
    document.querySelectorAll("#cautions tbody tr").forEach((row) => {
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

  // ---- words and tables -------------------------------------------------------------------------------
  function swatch(k) {
    const svg = document.createElementNS("http://www.w3.org/2000/svg", "svg");
    const line = document.createElementNS("http://www.w3.org/2000/svg", "line");
    svg.setAttribute("viewBox", "0 0 26 10"); svg.setAttribute("aria-hidden", "true");
    Object.entries({ x1: 0, x2: 26, y1: 5, y2: 5, "stroke-width": 3, "stroke-dasharray": STROKES[DASHES.indexOf(dash(k))] }).forEach(([n, v]) => line.setAttribute(n, v));
    line.style.stroke = "var(--r" + (k % 6) + ")";
    svg.appendChild(line);
    return svg;
  }
  function words() {
    const s = run.summary, facts = run.facts || {};
    element("kicker").textContent = count + (count === 1 ? " robot" : " robots") + (facts.site ? " · " + facts.site : "");
    element("manoeuvre").textContent = run.manoeuvre;
    const amiss = !s.completed ? "Not completed: " + s.state : s.contacts ? "Completed, but with a contact"
      : s.min_clearance_m !== null && s.min_clearance_m < run.minimum ? "Completed, but nearer than the site allows"
      : s.limit_violations ? "Completed, but outside a limit" : "";
    element("verdict").textContent = amiss ? "✕ " + amiss : "✓ Turn completed";
    element("verdict").classList.toggle("bad", amiss !== "");
    const origin = [];
    if (facts.simulated) origin.push("The machines were simulated.");
    if (facts.invented) origin.push("The site and its robots are invented.");
    element("origin").textContent = origin.join(" ");
    element("key").textContent = "Filled: now, with the front marked. Grey outline: where it stood at first. Dotted outline: the asked end. " +
      "Dotted line ahead: its plan at this moment. Grey lines: neighbours. Short thick line: the nearest two.";
  }
  function tile(label, value, unit, note, bad) {
    const box = make("div", null, element("tiles"), "tile" + (bad ? " bad" : ""));
    make("span", label, box);
    const b = make("b", value, box);
    if (unit) make("small", unit, b);
    make("span", note, box);
  }
  function tiles() {
    const s = run.summary, endMetres = largest(s.end_error_m), endHeading = largest(s.end_heading_error_rad);
    const near = s.min_clearance_m, below = near !== null && near < run.minimum;
    if (near !== null) tile("Smallest clearance", figure(near, 2), "m", (below ? "✕ below" : "✓ at or above") + " the site's minimum, " + figure(run.minimum, 2, "m"), below);
    tile("Contacts", String(s.contacts), "", s.contacts ? "✕ footprints touched" : "✓ no footprints touched", s.contacts > 0);
    tile("Outside a limit", String(s.limit_violations), "", s.limit_violations ? "✕ commands or speeds" : "✓ no command, no speed", s.limit_violations > 0);
    if (endMetres !== null) tile("Largest end error", figure(endMetres, 3), "m", endHeading === null ? "" : "and " + figure(endHeading * DEG, 1) + "° in heading");
    else if (endHeading !== null) tile("Largest end error", figure(endHeading * DEG, 1) + "°", "", "in heading");
    if (count > 1 && s.heading_spread_max_rad !== null) tile("Heading spread", figure(s.heading_spread_max_rad * DEG, 1) + "°", "", "largest, at equal time");
    tile("Duration", figure(s.duration_s, 1), "s", s.real_time_factor === null ? "" : figure(s.real_time_factor, 1) + " × real time");
    if (s.tick_ms.median !== null) tile("Planning time", figure(s.tick_ms.median, 1), "ms", "median; 99 in 100 within " + figure(s.tick_ms.p99, 1, "ms"));
  }
  function table(id, head, rows) {
    const node = element(id), top = make("tr", null, make("thead", null, node));
    head.forEach((text, n) => make("th", text, top, n && id === "each" ? "number" : ""));
    const body = make("tbody", null, node);
    return rows.map((cells) => {
      const row = make("tr", null, body);
      cells.forEach((cell, n) => make(n ? "td" : "th", cell, row, n && id === "each" ? "number" : ""));
      return row;
    });
  }
  function eachRobot() {
    const s = run.summary, of = (values, k) => (values || {})[run.names[k]], degrees = (v) => (v === null || v === undefined ? null : v * DEG);
    const rows = table("each", ["Robot", "Turn onset, s", "Heading change, °", "End error, m", "End heading error, °", "Largest curvature, 1/m", "Highest speed, m/s"],
      robots.map((k) => [run.names[k], figure(of(s.turn_onset_s, k), 2), figure(degrees(of(s.heading_change_rad, k)), 1), figure(of(s.end_error_m, k), 3),
        figure(degrees(of(s.end_heading_error_rad, k)), 2), figure(largest(run.curvature[k]), 3), figure(largest(run.speed[k]), 2)]));
    rows.forEach((row, k) => row.firstChild.prepend(swatch(k)));
  }
  function warnedTable() {
    const items = run.cautions.map((c) => ({ first: c.first, last: c.last, kind: (c.level >= 2 ? "✕ " : "▲ ") + c.code, who: c.subject, text: c.text }))
      .concat(run.events.map((e) => ({ first: e.time, last: e.time, kind: "◆ event", who: "", text: e.text })));
    items.sort((a, b) => a.first - b.first);
    if (!items.length) { make("caption", "Nothing was warned of in this run.", element("cautions")); return; }
    const span = (i) => figure(i.first, 1) + (i.last === i.first ? "" : i.last === null ? " to the end" : " to " + figure(i.last, 1)) + "\u202fs";
    const rows = table("cautions", ["When", "What", "Who", "In words"], items.map((i) => [span(i), i.kind, i.who, i.text]));
    rows.forEach((row, n) => {
      row.dataset.first = items[n].first; row.dataset.last = items[n].last === null ? "" : items[n].last;
      row.style.cursor = "pointer";
      row.addEventListener("click", () => goTo(items[n].first));
    });
  }
  function allFigures() {
    const rows = [];
    Object.entries(run.summary).forEach(([key, value]) => {
      if (Array.isArray(value)) rows.push([key, value.length + " (listed above)"]);
      else if (value !== null && typeof value === "object") rows.push([key, Object.entries(value).map(([name, v]) => name + "\u00a0" + figure(v, 3)).join(", ")]);
      else rows.push([key, typeof value === "number" ? figure(value, Number.isInteger(value) ? 0 : 4) : value === null ? "–" : String(value)]);
    });
    table("figures", ["Key of simulate --json", "Value"], rows).forEach(asCode);
    const facts = Object.entries(run.facts || {}).map(([key, value]) => [key, typeof value === "string" ? value : JSON.stringify(value)]);
    facts.push(["neighbours", run.edges.map((e) => run.names[e[0]] + " – " + run.names[e[1]] + (e[2] === 1 ? "" : " (" + e[2] + ")")).join(", ") || "none"]);
    table("facts", ["Fact", "Value"], facts).forEach(asCode);
  }
  function asCode(row) {
    const cell = row.firstChild, text = cell.textContent;
    cell.textContent = ""; make("code", text, cell);
  }
  function chips() {
    robots.forEach((k) => {
      const button = make("button", null, element("robots"));
      button.type = "button"; button.append(swatch(k), document.createTextNode(run.names[k]));
      button.addEventListener("click", () => { chosen = chosen === k ? -1 : k; emphasise(); });
    });
  }
  function marks() {
    const place = (t) => 100 * (Math.min(Math.max(t, first), last) - first) / Math.max(last - first, 1e-9);
    run.cautions.forEach((c) => {
      const mark = make("i", null, element("marks"), c.level >= 2 ? "error" : "");
      mark.style.left = place(c.first) + "%"; mark.style.width = place(c.last === null ? last : c.last) - place(c.first) + "%"; mark.title = c.code + ": " + c.text;
    });
    run.events.forEach((e) => { const mark = make("i", null, element("marks"), "event"); mark.style.left = place(e.time) + "%"; mark.title = e.text; });
  }

  words(); tiles(); chips();
  eachRobot(); warnedTable(); allFigures();
  if (!samples) { element("readout").textContent = "Nothing was recorded."; return; }
  Object.assign(slider, { min: String(first), max: String(last), step: "0.01", value: String(first) });
  marks();
  time = Math.min(Math.max((first + last) / 2, first), last);
  drawAll(); goTo(time);
  charts.on("plotly_click", (event) => goTo(event.points[0].x));
  charts.on("plotly_afterplot", placeCursor);
  slider.addEventListener("input", () => { play(false); goTo(Number(slider.value)); });
  element("play").addEventListener("click", () => play(!playing));
  document.addEventListener("keydown", (event) => {
    if (event.code === "Space" && !/^(BUTTON|SELECT|INPUT)$/.test(event.target.tagName)) { event.preventDefault(); play(!playing); }
  });
  window.matchMedia("(prefers-color-scheme: dark)").addEventListener("change", drawAll);
  let waiting = 0;
  window.addEventListener("resize", () => { cancelAnimationFrame(waiting); waiting = requestAnimationFrame(drawAll); });
  ["beforeprint", "afterprint"].forEach((name) => window.addEventListener(name, () => {
    document.documentElement.classList.toggle("printing", name === "beforeprint");
    drawAll();
  }));
})();
