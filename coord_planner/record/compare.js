"use strict";
(function () {
  const both = JSON.parse(document.getElementById("run").textContent), runs = [both.first, both.second];
  const element = (id) => document.getElementById(id), charts = element("charts");
  const names = [...new Set(runs.flatMap((run) => run.names))], LETTERS = ["A", "B"];
  const pairs = Math.min(...runs.map((run) => run.figures.turns.length));
  let which = 0, transport = null;

  const turnOf = (run) => run.figures.turns[which];
  // Where the time of a recording counts as 0: at the first onset of the turn; without a turn, where it begins.
  function zeroOf(run) {
    const onsets = turnOf(run) ? Object.values(turnOf(run).onset_s).filter((value) => value !== null) : [];
    return onsets.length ? Math.min(...onsets) : turnOf(run) ? turnOf(run).from_s : run.times[0];
  }
  function rangeOf() {
    const ends = runs.map((run) => (turnOf(run) ? [turnOf(run).from_s - zeroOf(run), turnOf(run).to_s - zeroOf(run)] : [0, run.times[run.times.length - 1] - run.times[0]]));
    return [Math.min(...ends.map((e) => e[0])) - 1, Math.max(...ends.map((e) => e[1])) + 1];
  }

  function words() {
    element("kicker").textContent = "Two recordings compared · B minus A";
    element("name").textContent = runs[0].name + " and " + runs[1].name;
    runs.forEach((run, n) => { element("title-" + (n + 1)).textContent = run.name + (run.to_scale ? "" : " (robots not to scale)"); });
    const broken = runs.filter((run) => run.figures.losses.length);
    element("verdict").textContent = broken.length ? "✕ Not whole: " + broken.map((run) => run.name).join(" and ") : "✓ Both read whole";
    element("verdict").classList.toggle("bad", broken.length > 0);
    runs.forEach((run, n) => run.figures.losses.forEach((text) => make("li", LETTERS[n] + ", lost: " + text, element("notes"), "bad")));
    both.notes.forEach((text) => make("li", text, element("notes")));
    if (!pairs) element("aligned").textContent = "No turn is in both recordings: times are seconds since each began.";
    for (let n = 0; n < Math.max(pairs, 1); n += 1) {
      const option = make("option", pairs ? String(n + 1) : "none", element("which"));
      option.value = String(n);
    }
  }
  function differences() {
    element("differences").replaceChildren();
    const rows = both.differences.filter((row) => row.turn === null || row.turn === which + 1);
    table(element("differences"), ["Figure", "A", "B", "B minus A"], rows.map((row) => [row.figure].concat(["first", "second", "change"].map((key) => number(row[key])))), true);
  }
  function number(value) { return value === null ? "–" : Number.isInteger(value) ? figure(value, 0) : figure(value, 3); }

  // ---- both against time ----------------------------------------------------------------------------------
  const ROWS = [
    { title: "Heading change since the first onset, degrees", weight: 5, digits: 1, unit: "°", series: (run, k) => since(run, k).map((v) => (v === null ? null : v * DEG)) },
    { title: "Turn rate, rad/s, left positive", weight: 5, digits: 3, unit: " rad/s", series: (run, k) => run.rate[k] },
    { title: "Clearance, m: the nearest two robots at each moment", weight: 4 },
  ];
  shareHeight(ROWS);
  function since(run, k) {
    const zero = zeroOf(run), at = run.times.findIndex((t, n) => t >= zero && run.heading[k][n] !== null);
    const begin = at < 0 ? null : run.heading[k][at];
    return run.heading[k].map((v) => (v === null || begin === null ? null : v - begin));
  }
  function drawCharts() {
    const traces = [], layout = Object.assign(base(charts), { hovermode: "x", margin: MARGIN, annotations: [], shapes: [] });
    runs.forEach((run, b) => {
      const zero = zeroOf(run), x = run.times.map((t) => t - zero), line = { width: 1.8, dash: b ? "dash" : "solid" };
      ROWS.slice(0, 2).forEach((row, n) => run.names.forEach((name, k) => traces.push({ type: "scatter", mode: "lines", x, y: row.series(run, k), xaxis: "x", yaxis: yName(n),
        name: LETTERS[b] + " " + safe(name), line: Object.assign({ color: colour(names.indexOf(name)) }, line), hovertemplate: "%{y:." + row.digits + "f}" + row.unit })));
      traces.push({ type: "scatter", mode: "lines", x, y: run.nearest.clearance, xaxis: "x", yaxis: "y3", name: LETTERS[b] + " nearest two",
        line: Object.assign({ color: css("--ink") }, line), hovertemplate: "%{y:.2f} m" });
    });
    layout.xaxis = timeAxis(pairs ? "seconds since the first onset of the turn" : "seconds since each recording began", rangeOf(), ROWS.length);
    ROWS.forEach((row, n) => addRow(layout, row, n));
    const minimum = runs.map((run) => run.minimum).find((value) => value !== null);
    Object.assign(layout.yaxis3, { rangemode: "tozero" });
    if (minimum !== undefined) addMinimum(layout, "y3", minimum);
    Plotly.react(charts, traces, layout, OPTIONS);
  }
  function drawHops() {
    if (!pairs) return;
    const set = (run, b, values, sds) => ({ turn: turnOf(run), values, sds, open: b === 1, since: zeroOf(run) });
    const after = (run) => Object.fromEntries(Object.entries(turnOf(run).onset_s).map(([name, t]) => [name, t === null ? null : t - zeroOf(run)]));
    drawByHop(element("onsets"), "Onset after the first, s", names, runs.map((run, b) => set(run, b, after(run), turnOf(run).onset_sd_s)), true);
    drawByHop(element("amplitudes"), "Largest turn rate, rad/s", names, runs.map((run, b) => set(run, b, turnOf(run).amplitude_rad_per_s, turnOf(run).amplitude_sd_rad_per_s)), false);
  }

  words();
  const stages = runs.map((run, n) => makeStage(run, { suffix: "-" + (n + 1), trail: 30 }));
  function show(t) {
    const parts = stages.map((stage, n) => {
      const m = stage.show(Math.min(Math.max(t + zeroOf(runs[n]), stage.first), stage.last));
      return [m.clearance === null ? "" : LETTERS[n] + " nearest " + figure(m.clearance, 2, "m"), stage.tooNear(m)];
    });
    putCursor(charts, element("cursor"), t);
    return [parts.map((part) => part[0]).filter(Boolean), parts.some((part) => part[1])];
  }
  function drawAll() {
    stages.forEach((stage) => stage.drawAll());
    drawCharts(); drawHops();
    if (transport) transport.goTo(transport.now());
  }
  function choose() {
    which = Number(element("which").value);
    if (transport) transport.range(...rangeOf()); else transport = makeTransport(...rangeOf(), show);
    differences(); drawAll();
    stages.forEach((stage, n) => { const turn = turnOf(runs[n]); stage.lookAt(turn ? stage.boxOf(turn.from_s, turn.to_s) : null); });
    transport.goTo(0);
  }
  choose();
  element("which").addEventListener("change", choose);
  charts.on("plotly_click", (event) => transport.goTo(event.points[0].x));
  charts.on("plotly_afterplot", () => putCursor(charts, element("cursor"), transport.now()));
  keepDrawn(drawAll);
})();
