"use strict";
(function () {
  const sweep = JSON.parse(document.getElementById("run").textContent);
  const element = (id) => document.getElementById(id);
  const rowOf = {}; // point -> its row
  sweep.rows.forEach((row) => { rowOf[row.point] = row; });
  let chosenSetting = -1, chosenRow = null, time = 0, playing = false;

  function short(value) { // a number with four digits that matter, or a word
    if (value === null || value === undefined) return "–";
    return typeof value === "number" ? String(Number(value.toPrecision(4))).replace("-", "−") : String(value);
  }
  function laidOut(plot, extra) {
    return Object.assign(base(plot), { hovermode: "closest" }, extra);
  }
  function title(text) { return { text: safe(text), font: { size: 11, color: css("--soft") }, standoff: 6 }; }
  function named(name) { const m = sweep.measures[name]; return m.words + ", " + m.unit; }
  function valuesOf(setting) {
    return sweep.axes.map((a) => a.key + " " + short(sweep.settings[setting].labels[a.key])).join(", ") || "the file as it stands";
  }
  const several = sweep.manoeuvres.length > 1;
  function which(row) { return (several ? row.manoeuvre.replace(/_/g, " ") + ", " : "") + "seed " + row.seed; }

  // ---- words ------------------------------------------------------------------------------------------
  function words() {
    const kept = sweep.settings.filter((s) => s.keeps).length, all = sweep.settings.length;
    element("kicker").textContent = "Sweep · " + sweep.site + " · " + sweep.robots.length + (sweep.robots.length === 1 ? " robot" : " robots");
    element("name").textContent = sweep.manoeuvres.join(", ");
    element("verdict").textContent = sweep.best === null ? "✕ No setting keeps every rule" : "✓ " + kept + " of " + all + " settings keep every rule";
    element("verdict").classList.toggle("bad", sweep.best === null);
    const said = ["The machines were simulated."];
    if (sweep.invented) said.push("The site and its robots are invented.");
    if (sweep.faults.length) said.push("In every rehearsal: " + sweep.faults.join("; ") + ".");
    Object.entries(sweep.fixed).forEach(([key, value]) => said.push(key + " set to " + value + "."));
    said.push("Rules: completed, no contact, no command outside a limit, the smallest clearance of " + sweep.reference +
      Object.entries(sweep.within).map(([name, value]) => ", " + sweep.measures[name].words + (sweep.measures[name].larger_is_better ? " at least " : " at most ") +
        short(value) + " " + sweep.measures[name].unit).join("") + "; in every rehearsal of a setting.");
    element("origin").textContent = said.join(" ");
    element("front-key").textContent = "Each mark is a setting, the mean over its rehearsals. Filled: keeps every rule. Cross: does not. Star: the best by the objective. " +
      "Diamond: the file as shipped. Line: settings that no other beats in both directions. A click shows the turn.";
    element("measures-key").textContent = Object.values(sweep.measures).map((m) => m.words[0].toUpperCase() + m.words.slice(1) + ": " + m.meaning).join(". ") + ".";
    element("each-key").textContent = "Each mark is a rehearsal; a cross broke a rule. The line joins the means. A click shows the turn.";
    element("matter-key").textContent = "Rank correlation (Spearman) with its 95% interval, over settings: to the right, more of the parameter gives more of the measure. " +
      "An interval that crosses the middle does not tell a trend; what is explained also counts effects that rise and fall again.";
  }
  function tiles() {
    const count = (status) => sweep.rows.filter((row) => row.status === status).length;
    tile("Rehearsals", String(sweep.rows.length), "", count("refused") + " refused, " + count("failed") + " failed", count("failed") > 0);
    if (sweep.best === null) return;
    const best = sweep.settings[sweep.best], shipped = sweep.shipped === null ? null : sweep.settings[sweep.shipped];
    tile("Best objective", short(best.objective), "", shipped && shipped.objective !== null ? "as shipped " + short(shipped.objective) : "less is better");
    sweep.main.forEach((name) => {
      const m = sweep.measures[name], before = shipped ? shipped.mean[name] : null;
      tile("Best: " + m.words, short(best.mean[name]), m.unit, before === null ? "mean over rehearsals" : "as shipped " + short(before));
    });
  }

  // ---- the trade-off ----------------------------------------------------------------------------------
  const front = element("front"), across = element("across"), up = element("up");
  function selects() {
    const wanted = sweep.counted.concat(sweep.main).filter((name, n, all) => all.indexOf(name) === n);
    Object.keys(sweep.measures).forEach((name) => [across, up].forEach((select) => { make("option", named(name), select).value = name; }));
    across.value = wanted[0]; up.value = wanted[1];
    [across, up].forEach((select) => select.addEventListener("change", drawFront));
  }
  function cost(name, value) { return sweep.measures[name].larger_is_better ? -value : value; }
  function frontOf(x, y) { // of those that keep the rules, the ones that no other beats in both
    const there = sweep.settings.map((s, n) => [n, s]).filter(([, s]) => s.keeps && s.mean[x] !== null && s.mean[y] !== null);
    const better = (a, b) => cost(x, a.mean[x]) <= cost(x, b.mean[x]) && cost(y, a.mean[y]) <= cost(y, b.mean[y]) &&
      (a.mean[x] !== b.mean[x] || a.mean[y] !== b.mean[y]);
    return there.filter(([, s]) => !there.some(([, other]) => better(other, s))).map(([n]) => n)
      .sort((a, b) => sweep.settings[a].mean[x] - sweep.settings[b].mean[x]);
  }
  function hover(setting, x, y) {
    const s = sweep.settings[setting];
    const lines = sweep.axes.map((a) => a.key + " " + short(s.labels[a.key])).concat([named(x) + " " + short(s.mean[x]), named(y) + " " + short(s.mean[y]),
      "objective " + short(s.objective)], s.broken.slice(0, 3));
    return lines.map(safe).join("<br>");
  }
  function marks(list, x, y, marker) {
    return { type: "scatter", mode: "markers", x: list.map((n) => sweep.settings[n].mean[x]), y: list.map((n) => sweep.settings[n].mean[y]), customdata: list,
      hoverinfo: "text", text: list.map((n) => hover(n, x, y)), marker: Object.assign({ size: 10, line: { width: 1, color: css("--panel") } }, marker) };
  }
  function drawFront() {
    const x = across.value, y = up.value, numbers = sweep.settings.map((_, n) => n);
    const special = [sweep.best, sweep.shipped], line = frontOf(x, y);
    const kept = numbers.filter((n) => sweep.settings[n].keeps && !special.includes(n)), broken = numbers.filter((n) => !sweep.settings[n].keeps && !special.includes(n));
    const traces = [
      { type: "scatter", mode: "lines", hoverinfo: "skip", x: line.map((n) => sweep.settings[n].mean[x]), y: line.map((n) => sweep.settings[n].mean[y]), line: { color: css("--soft"), width: 1.5, dash: "dot" } },
      marks(broken, x, y, { symbol: "x-thin", color: css("--bad"), line: { width: 2, color: css("--bad") } }),
      marks(kept, x, y, { symbol: "circle", color: css("--r0") }),
      marks(sweep.shipped === null || sweep.shipped === sweep.best ? [] : [sweep.shipped], x, y, { symbol: "diamond", size: 13,
        color: sweep.shipped !== null && sweep.settings[sweep.shipped].keeps ? css("--r4") : css("--bad"), line: { width: 1, color: css("--ink") } }),
      marks(sweep.best === null ? [] : [sweep.best], x, y, { symbol: "star", size: 18, color: css("--r2"), line: { width: 1.2, color: css("--ink") } }),
      marks(chosenSetting < 0 ? [] : [chosenSetting], x, y, { symbol: "circle-open", size: 24, color: css("--ink"), line: { width: 1.6, color: css("--ink") } }),
    ];
    traces[5].hoverinfo = "skip";
    const label = (n, words, shift) => ({ x: sweep.settings[n].mean[x], y: sweep.settings[n].mean[y], text: words, showarrow: false, yshift: shift, font: { size: 11.5, color: css("--ink") } });
    const layout = laidOut(front, { margin: { l: 58, r: 18, t: 22, b: 46 }, xaxis: axis({ title: title(named(x)) }), yaxis: axis({ title: title(named(y)) }),
      annotations: (sweep.best === null ? [] : [label(sweep.best, sweep.best === sweep.shipped ? "best, as shipped" : "best", 19)])
        .concat(sweep.shipped === null || sweep.shipped === sweep.best ? [] : [label(sweep.shipped, "as shipped", -17)])
        .filter((a) => a.x !== null && a.y !== null) });
    Plotly.react(front, traces, layout, OPTIONS);
  }

  // ---- what each parameter does -----------------------------------------------------------------------
  const boxes = [];
  function parameterBoxes() {
    if (!sweep.axes.length) make("p", "Nothing was varied.", element("each"), "key");
    sweep.axes.forEach((a) => {
      const holder = make("div", null, element("each"), "parameter"), head = make("h3", null, holder);
      make("code", a.key, head);
      boxes.push({ a, plot: make("div", null, holder, "plot") });
    });
  }
  function logarithmicTicks(values, most) { // at the values themselves where there are few
    if (values.length && values.length <= most) return { tickvals: values, ticktext: values.map(short) };
    return { dtick: Math.log10(Math.max(...values) / Math.min(...values)) < 1.6 ? "D2" : 1 };
  }
  function drawParameter({ a, plot }) {
    const wide = window.innerWidth >= 700, columns = wide ? 4 : 2, lines = wide ? 1 : 2, traces = [], layout = laidOut(plot, { margin: { l: 8, r: 8, t: 22, b: 34 }, annotations: [], shapes: [] });
    const gap = wide ? 0.05 : 0.14;
    sweep.main.forEach((name, n) => {
      const id = n ? String(n + 1) : "", column = n % columns, line = Math.floor(n / columns);
      const x0 = column / columns + (column ? gap / 2 : 0) + 0.03, x1 = (column + 1) / columns - 0.01;
      const y0 = line === lines - 1 ? 0 : 0.56, y1 = line ? 0.44 : 1;
      const there = sweep.rows.filter((row) => row[name] !== null && sweep.settings[row.setting].labels[a.key] !== undefined);
      const of = (row) => sweep.settings[row.setting].labels[a.key], shown = (v) => (a.ordered ? v : String(v));
      [true, false].forEach((keeps) => {
        const some = there.filter((row) => sweep.settings[row.setting].keeps === keeps);
        traces.push({ type: "scatter", mode: "markers", x: some.map((row) => shown(of(row))), y: some.map((row) => row[name]), xaxis: "x" + id, yaxis: "y" + id,
          customdata: some.map((row) => row.point), hoverinfo: "text", text: some.map((row) => [valuesOf(row.setting), which(row), named(name) + " " + short(row[name])].map(safe).join("<br>")),
          marker: keeps ? { size: 7, color: css("--r0"), opacity: 0.75 } : { size: 7, symbol: "x-thin", color: css("--bad"), line: { width: 1.6, color: css("--bad") } } });
      });
      const values = [...new Set(there.map(of))];
      if (a.ordered) values.sort((p, q) => p - q);
      if (values.length < 0.5 * there.length) {
        const mean = (v) => { const some = there.filter((row) => of(row) === v).map((row) => row[name]); return some.reduce((p, q) => p + q, 0) / some.length; };
        traces.push({ type: "scatter", mode: "lines", hoverinfo: "skip", x: values.map(shown), y: values.map(mean), xaxis: "x" + id, yaxis: "y" + id, line: { color: css("--ink"), width: 1.4 } });
      }
      if (chosenRow && chosenRow[name] !== null) traces.push({ type: "scatter", mode: "markers", hoverinfo: "skip", x: [shown(of(chosenRow))], y: [chosenRow[name]], xaxis: "x" + id, yaxis: "y" + id,
        marker: { symbol: "circle-open", size: 15, color: css("--ink"), line: { width: 1.6 } } });
      layout["xaxis" + id] = axis({ domain: [x0, x1], anchor: "y" + id, type: a.ordered ? (a.logarithmic ? "log" : "linear") : "category", nticks: 5, fixedrange: true,
        ...(a.ordered && a.logarithmic ? logarithmicTicks([...new Set(there.map(of))], wide ? 7 : 4) : {}) });
      layout["yaxis" + id] = axis({ domain: [y0, y1], anchor: "x" + id, nticks: 5, fixedrange: true, ticklabelposition: "inside top", tickfont: { color: css("--soft"), size: 10 } });
      layout.annotations.push({ text: safe(named(name)), xref: "paper", yref: "paper", x: x0, y: y1, xanchor: "left", yanchor: "bottom", yshift: 3, showarrow: false, font: { size: 11.5, color: css("--ink") } });
      const minimum = largest(sweep.rows.map((row) => row.site_min_clearance_m).filter((v) => v !== null && v !== undefined));
      if (name === "min_clearance_m" && minimum !== null) layout.shapes.push({ type: "line", xref: "x" + id + " domain", yref: "y" + id, x0: 0, x1: 1, y0: minimum, y1: minimum, line: { color: css("--bad"), width: 1.3, dash: "dash" } });
    });
    Plotly.react(plot, traces, layout, OPTIONS);
  }

  // ---- which matter -----------------------------------------------------------------------------------
  const matter = element("matter");
  function drawMatter() {
    const list = sweep.effects.filter((e) => sweep.main.includes(e.measure) && e.correlation !== null).reverse();
    matter.style.display = list.length ? "" : "none";
    if (!list.length) return;
    matter.style.height = 60 + 24 * list.length + "px";
    const strength = (e) => css(e.verdict === "matters" ? "--accent" : "--soft");
    const wide = window.innerWidth >= 700, name = (e) => (wide ? e.parameter : e.parameter.split(".").pop()) + " → " + sweep.measures[e.measure].words;
    const traces = [{ type: "scatter", mode: "markers", x: list.map((e) => e.correlation), y: list.map((_, n) => n), hoverinfo: "text",
      text: list.map((e) => safe(name(e)) + "<br>" + figure(e.correlation, 2) + ", " + figure(e.low, 2) + " to " + figure(e.high, 2) + "<br>" + e.verdict),
      error_x: { type: "data", symmetric: false, array: list.map((e) => e.high - e.correlation), arrayminus: list.map((e) => e.correlation - e.low), color: css("--soft"), thickness: 1.6, width: 3 },
      marker: { size: 10, color: list.map(strength), symbol: list.map((e) => (e.verdict === "matters" ? "circle" : "circle-open")), line: { width: 1.5, color: list.map(strength) } } }];
    const layout = laidOut(matter, { margin: { l: wide ? 330 : 165, r: 16, t: 6, b: 40 },
      xaxis: axis({ range: [-1.05, 1.05], zeroline: true, title: title("rank correlation"), fixedrange: true }),
      yaxis: axis({ tickvals: list.map((_, n) => n), ticktext: list.map((e) => safe(name(e))), fixedrange: true, range: [-0.6, list.length - 0.4] }) });
    Plotly.react(matter, traces, layout, OPTIONS);
  }

  // ---- tables -----------------------------------------------------------------------------------------
  function figuresTable(id, head, rows) {
    const node = element(id), top = make("tr", null, make("thead", null, node));
    node.classList.add("figures");
    head.forEach(([text, cls]) => make("th", text, top, cls));
    const body = make("tbody", null, node);
    return rows.map((cells) => {
      const row = make("tr", null, body);
      cells.forEach((cell, n) => make(n ? "td" : "th", cell, row, head[n][1]));
      return row;
    });
  }
  function effectsTable() {
    const percent = (v) => (v === null ? "–" : figure(100 * v, 0) + "\u202f%");
    figuresTable("effects", [["Parameter", ""], ["Measure", ""], ["Rank correlation", "number"], ["95% interval", "number"], ["Explains", "number"], ["Verdict", ""]],
      sweep.effects.map((e) => [e.parameter, sweep.measures[e.measure].words, figure(e.correlation, 2), e.low === null ? "–" : figure(e.low, 2) + " to " + figure(e.high, 2), percent(e.explained), e.verdict]));
  }
  let settingRows = {};
  function settingsTable() {
    const order = sweep.settings.map((_, n) => n).sort((a, b) => {
      const p = sweep.settings[a], q = sweep.settings[b];
      return (q.keeps - p.keeps) || ((p.objective === null) - (q.objective === null)) || (p.objective - q.objective) || (a - b);
    });
    const head = [["Setting", ""], ["", ""]].concat(sweep.axes.map((a) => [a.key, "number"]), [["Objective", "number"]], sweep.main.map((name) => [named(name), "number"]), [["Rules", "broken"]]);
    const rows = figuresTable("settings", head, order.map((n) => {
      const s = sweep.settings[n], doubt = s.doubt === null ? "" : " ± " + Number(s.doubt.toPrecision(2));
      return [String(n), ""].concat(sweep.axes.map((a) => short(s.labels[a.key])), [short(s.objective) + doubt], sweep.main.map((name) => short(s.mean[name])), [s.broken.join("; ")]);
    }));
    rows.forEach((row, k) => {
      const n = order[k], cell = row.children[1];
      if (n === sweep.best) make("span", "best", cell, "mark best");
      if (n === sweep.shipped) make("span", "as shipped", cell, "mark shipped");
      if (!sweep.settings[n].broken.length) { row.lastChild.textContent = "✓ kept"; row.lastChild.className = ""; }
      row.tabIndex = 0;
      row.addEventListener("click", () => chooseSetting(n));
      row.addEventListener("keydown", (event) => { if (event.key === "Enter") chooseSetting(n); });
      settingRows[n] = row;
    });
  }
  function bestPanel() {
    element("best-panel").hidden = sweep.best === null;
    if (sweep.best === null) return;
    const changed = sweep.best === sweep.shipped ? "The file as shipped is the best of these: " : "";
    const price = Object.entries(sweep.objective).filter(([, w]) => w > 0).map(([name, w]) => (sweep.measures[name].larger_is_better ? "−" : "") + short(w) + " × " + sweep.measures[name].words).join(" + ");
    element("best-words").textContent = changed + valuesOf(sweep.best) + ". Objective, mean over the rehearsals: " + price + "; less is better. Rehearse and test it on the site before anybody relies on it.";
    element("best-text").textContent = sweep.best_text;
    element("save").addEventListener("click", () => {
      const link = make("a", null, document.body);
      link.href = URL.createObjectURL(new Blob([sweep.best_text], { type: "application/yaml" }));
      link.download = "best.yaml"; link.click(); link.remove();
      setTimeout(() => URL.revokeObjectURL(link.href), 10000);
    });
  }

  // ---- the turn ---------------------------------------------------------------------------------------
  const turn = element("turn"), slider = element("time");
  function chooseSetting(n) {
    const rows = sweep.settings[n].rows.map((point) => rowOf[point]);
    choose(rows.find((row) => row.track !== null) || rows[0] || null, n);
  }
  function choose(row, setting) {
    chosenRow = row; chosenSetting = setting;
    Object.entries(settingRows).forEach(([n, node]) => node.classList.toggle("chosen", Number(n) === setting));
    seedButtons();
    describe();
    const track = currentTrack();
    play(false);
    if (track) {
      Object.assign(slider, { min: String(track.times[0]), max: String(track.times[track.times.length - 1]), step: "0.01" });
      const known = track.clearance.map((v, n) => [v, n]).filter(([v]) => v !== null).sort((a, b) => a[0] - b[0]);
      time = known.length ? track.times[known[0][1]] : track.times[track.times.length - 1];
    }
    drawTurn(); drawFront(); boxes.forEach(drawParameter);
  }
  function currentTrack() { return chosenRow && chosenRow.track !== null ? sweep.tracks[chosenRow.track] : null; }
  function seedButtons() {
    const holder = element("seeds");
    holder.textContent = "";
    if (chosenSetting < 0 || sweep.settings[chosenSetting].rows.length < 2) return;
    make("span", several ? "Rehearsal" : "Seed", holder);
    sweep.settings[chosenSetting].rows.forEach((point) => {
      const button = make("button", several ? which(rowOf[point]) : String(rowOf[point].seed), holder);
      button.type = "button"; button.setAttribute("aria-pressed", String(rowOf[point] === chosenRow));
      button.addEventListener("click", () => choose(rowOf[point], chosenSetting));
    });
  }
  function describe() {
    const of = element("of");
    of.textContent = "";
    if (!chosenRow) { of.textContent = "Nothing was rehearsed."; return; }
    make("b", "Setting " + chosenSetting + (chosenSetting === sweep.best ? ", the best" : "") + (chosenSetting === sweep.shipped ? ", as shipped" : "") + ", " + which(chosenRow), of);
    of.append(": " + valuesOf(chosenSetting));
    const parts = chosenRow.status === "done" ? sweep.main.map((name) => sweep.measures[name].words + " " + short(chosenRow[name]) + "\u202f" + sweep.measures[name].unit) : [chosenRow.status + ": " + chosenRow.reason];
    if (chosenRow.contacts) parts.push("✕ " + chosenRow.contacts + " contacts");
    if (chosenRow.warnings) parts.push("▲ " + chosenRow.warnings);
    element("figures-of").textContent = parts.join(" · ");
  }
  function at(track, t) {
    const last = track.times.length - 1;
    let low = 0;
    while (low < last - 1 && track.times[low + 1] <= t) low += 1;
    const high = Math.min(low + 1, last), span = track.times[high] - track.times[low];
    const part = span > 0 ? Math.min(Math.max((t - track.times[low]) / span, 0), 1) : 0;
    const mix = (series) => series[low] + part * (series[high] - series[low]);
    return { low, clearance: track.clearance[low] === null ? null : mix(track.clearance), poses: track.x.map((_, k) => [mix(track.x[k]), mix(track.y[k]), mix(track.heading[k])]) };
  }
  function outlineAt(track, k, [x, y, heading]) {
    const c = Math.cos(heading), s = Math.sin(heading), corners = track.corners[k].concat([track.corners[k][0]]);
    return { x: corners.map((p) => x + c * p[0] - s * p[1]), y: corners.map((p) => y + s * p[0] + c * p[1]) };
  }
  function noseAt(track, k, [x, y, heading]) {
    const front = track.corners[k].reduce((most, p) => Math.max(most, p[0]), -Infinity), c = Math.cos(heading), s = Math.sin(heading);
    return { x: [x, x + c * front], y: [y, y + s * front] };
  }
  function turnTraces(track) {
    const m = at(track, time), robots = track.x.map((_, k) => k), plain = { type: "scatter", mode: "lines", hoverinfo: "skip" }, traces = [];
    robots.forEach((k) => traces.push(Object.assign({}, plain, outlineAt(track, k, [track.x[k][0], track.y[k][0], track.heading[k][0]]), { line: { color: css("--soft"), width: 1 }, opacity: 0.5 })));
    robots.forEach((k) => traces.push(Object.assign({}, plain, { x: track.x[k], y: track.y[k], line: { color: colour(k), width: 1.6, dash: dash(k) }, opacity: 0.8 })));
    const edges = { x: [], y: [] };
    track.edges.forEach(([a, b]) => { edges.x.push(m.poses[a][0], m.poses[b][0], null); edges.y.push(m.poses[a][1], m.poses[b][1], null); });
    traces.push(Object.assign({}, plain, edges, { line: { color: css("--soft"), width: 1.2 } }));
    robots.forEach((k) => traces.push(Object.assign({}, plain, outlineAt(track, k, m.poses[k]), { fill: "toself", fillcolor: colour(k), line: { color: css("--ink"), width: 1 }, hoverinfo: "text", text: safe(sweep.robots[k]) })));
    robots.forEach((k) => traces.push(Object.assign({}, plain, noseAt(track, k, m.poses[k]), { line: { color: css("--panel"), width: 2 } })));
    return [traces, m];
  }
  function extent(track) {
    const reach = Math.max(...track.corners.flat(2).map(Math.abs)), xs = track.x.flat(), ys = track.y.flat();
    return [Math.min(...xs) - reach, Math.max(...xs) + reach, Math.min(...ys) - reach, Math.max(...ys) + reach];
  }
  function drawTurn() {
    const track = currentTrack();
    document.querySelector(".transport.inside").style.visibility = track ? "" : "hidden";
    if (!track) {
      const text = chosenRow ? safe(chosenRow.status) : "nothing to show";
      Plotly.react(turn, [], laidOut(turn, { xaxis: { visible: false }, yaxis: { visible: false }, annotations: [{ text, showarrow: false, x: 0.5, y: 0.5, xref: "paper", yref: "paper", font: { size: 14, color: css("--soft") } }] }), OPTIONS);
      return;
    }
    const [traces, m] = turnTraces(track), box = extent(track);
    slider.value = String(time);
    element("now").textContent = figure(time, 1, "s");
    slider.setAttribute("aria-valuetext", figure(time, 1) + " seconds");
    const note = m.clearance === null ? "" : "nearest " + figure(m.clearance, 2, "m");
    Plotly.react(turn, traces, laidOut(turn, { margin: { l: 38, r: 8, t: 6, b: 30 }, uirevision: "setting " + chosenSetting,
      xaxis: axis({ range: [box[0], box[1]], ticksuffix: " m" }), yaxis: axis({ range: [box[2], box[3]], scaleanchor: "x", scaleratio: 1 }),
      annotations: [{ text: note, showarrow: false, xref: "paper", yref: "paper", x: 1, y: 1, xanchor: "right", yanchor: "top", font: { size: 11.5, color: css("--soft") } }] }), OPTIONS);
  }
  function play(on) {
    const track = currentTrack();
    playing = on && track !== null;
    element("play").setAttribute("aria-label", playing ? "Pause" : "Play");
    element("play-icon").setAttribute("d", playing ? "M3 2h3.5v12H3zM9.5 2H13v12H9.5z" : "M4 2l9 6-9 6z");
    if (!playing) return;
    const last = track.times[track.times.length - 1];
    if (time >= last - 1e-9) time = track.times[0];
    let before = performance.now();
    const step = (now) => {
      if (!playing) return;
      time = Math.min(last, time + Math.min(now - before, 250) / 500); // twice as fast as real time
      before = now;
      drawTurn();
      if (time >= last) play(false); else requestAnimationFrame(step);
    };
    requestAnimationFrame(step);
  }

  function drawAll() { drawFront(); drawTurn(); boxes.forEach(drawParameter); drawMatter(); }
  words(); tiles(); selects(); parameterBoxes(); settingsTable(); effectsTable(); bestPanel();
  if (sweep.settings.length) chooseSetting(sweep.best !== null ? sweep.best : 0);
  drawAll();
  front.on("plotly_click", (event) => { const n = event.points[0].customdata; if (n !== undefined) chooseSetting(n); });
  boxes.forEach(({ plot }) => plot.on("plotly_click", (event) => {
    const row = rowOf[event.points[0].customdata];
    if (row) choose(row, row.setting);
  }));
  slider.addEventListener("input", () => { play(false); time = Number(slider.value); drawTurn(); });
  element("play").addEventListener("click", () => play(!playing));
  keepDrawn(drawAll);
})();
