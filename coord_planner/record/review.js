"use strict";
(function () {
  const run = JSON.parse(document.getElementById("run").textContent), figures = run.figures;
  const robots = run.names.map((_, k) => k), turns = figures.turns;
  const element = (id) => document.getElementById(id);
  const degrees = (value, digits) => (value === null || value === undefined ? "–" : figure(value * DEG, digits === undefined ? 1 : digits) + "°");
  let shownTurn = -1;

  function words() {
    element("kicker").textContent = "Recording · " + run.names.length + (run.names.length === 1 ? " robot" : " robots") + " · " + figure(figures.duration_s, 1, "s");
    element("name").textContent = run.name;
    const whole = !figures.losses.length;
    element("verdict").textContent = whole ? "✓ Read whole" : "✕ Not whole";
    element("verdict").classList.toggle("bad", !whole);
    figures.losses.forEach((text) => make("li", "Lost: " + text, element("notes"), "bad"));
    figures.notes.forEach((text) => make("li", text, element("notes")));
    element("key").textContent = "Filled: now, with the front marked" + (run.to_scale ? "" : "; not to scale, since no footprints are known") +
      ". Thick line: the last half minute. Dotted line ahead: the plan of this moment. Grey lines: neighbours. Short thick line: the nearest two.";
  }
  function tiles() {
    const near = figures.min_clearance_m, bounded = run.minimum !== null, below = bounded && near !== null && near < run.minimum;
    tile("Turns", String(turns.length), "", turns.length ? "each is a row below" : "none was found");
    if (near !== null) tile("Smallest clearance", figure(near, 2), "m", bounded ? (below ? "✕ below" : "✓ at or above") + " the site's minimum, " + figure(run.minimum, 2, "m") : "between the reported points", below);
    if (figures.contacts !== null) tile("Contacts", String(figures.contacts), "", figures.contacts ? "✕ footprints touched" : "✓ no footprints touched", figures.contacts > 0);
    const used = figures.limits.filter((row) => row.used !== null).sort((a, b) => b.used - a.used)[0];
    if (used) tile("Closest to a limit", figure(100 * used.used, 0), "%", used.limit.replace(/_/g, " ") + " of " + used.robot, used.used > 1.05);
    if (figures.commands_outside_limits !== null) tile("Commands outside a limit", String(figures.commands_outside_limits), "", figures.commands_outside_limits ? "✕ commanded" : "✓ none commanded", figures.commands_outside_limits > 0);
    tile("Warnings", String(figures.warnings.length), "", figures.warnings.length ? "listed below" : "nobody warned");
    const expected = figures.messages_expected;
    tile("Messages read", String(figures.messages_read), "", expected === null ? "how many there were is not known" : "of " + expected, expected !== null && expected !== figures.messages_read);
  }
  function turnRows(goTo) {
    if (!turns.length) { make("caption", "No turn was found.", element("turns")); element("turn-panel").hidden = true; return; }
    const cells = (turn, n) => [
      String(n + 1), figure(turn.from_s, 1) + " to " + figure(turn.to_s, 1), turn.first || "within the noise", figure(lag(turn), 2), degrees(largest(turn.heading_change_rad)),
      degrees(turn.heading_spread_max_rad), figure(turn.min_clearance_m, 2), turn.min_clearance_pair ? turn.min_clearance_pair.join(" and ") : "–",
      turn.spread ? figure(turn.spread.hops_per_s, 2) + " ± " + figure(turn.spread.hops_per_s_sd, 2) : "within the noise"];
    table(element("turns"), ["Turn", "When, s", "Turned first", "Last onset after the first, s", "Largest heading change", "Headings differed by", "Smallest clearance, m", "Between", "Spread, hops/s"],
      turns.map(cells)).forEach((row, n) => {
      jumps(row, turns[n].from_s, turns[n].to_s, (t) => { goTo(t); showTurn(n, true); });
    });
  }
  function lag(turn) {
    const onsets = Object.values(turn.onset_s).filter((value) => value !== null);
    return onsets.length ? Math.max(...onsets) - Math.min(...onsets) : null;
  }

  // ---- the turn that is looked at -------------------------------------------------------------------------
  function showTurn(n, look) {
    const turn = turns[n];
    if (!turn) return;
    if (look) stage.lookAt(stage.boxOf(turn.from_s, turn.to_s));
    if (n === shownTurn) return;
    shownTurn = n;
    element("turns").querySelectorAll("tbody tr").forEach((row, k) => row.classList.toggle("chosen", k === n));
    element("turn-title").textContent = "Turn " + (n + 1) + ": onset and strength " + (turn.hops ? "by distance along the neighbour graph" : "by robot");
    element("turn-words").textContent = inWords(turn);
    ["thead", "tbody"].forEach((part) => element("turn").querySelectorAll(part).forEach((node) => node.remove()));
    table(element("turn"), ["Robot", "Hops", "Onset, s", "±", "Largest turn rate, rad/s", "±", "Share of " + (turn.hops_from || "the first") + "’s", "Heading change"], run.names.map((name) => [
      name, turn.hops && turn.hops[name] !== null ? String(turn.hops[name]) : "–", figure(turn.onset_s[name], 2), figure(turn.onset_sd_s[name], 2),
      figure(turn.amplitude_rad_per_s[name], 3), figure(turn.amplitude_sd_rad_per_s[name], 3), figure(turn.share_of_origin[name], 2), degrees(turn.heading_change_rad[name])]), true)
      .forEach((row, k) => row.firstChild.prepend(swatch(k)));
    drawTurn();
  }
  function inWords(turn) {
    const from = turn.hops ? "Hops are counted from " + turn.hops_from + ", which " + turn.hops_from_because + ". " : "No neighbour graph is known, so robots stand side by side. ";
    const spread = turn.spread ? "The turn spread at " + figure(turn.spread.hops_per_s, 2) + " ± " + figure(turn.spread.hops_per_s_sd, 2) + " hops/s" +
      (turn.spread.m_per_s ? ", " + figure(turn.spread.m_per_s, 1, "m/s") : "") + "." : "Onsets do not grow with the distance by more than the noise, so no speed of spreading is given.";
    return from + spread + " Bars are two standard deviations either way. A share is the part of that robot's turn rate that another turned with at equal time.";
  }
  function drawTurn() {
    const turn = turns[shownTurn];
    if (!turn) return;
    [["onsets", "Onset, s", turn.onset_s, turn.onset_sd_s], ["amplitudes", "Largest turn rate, rad/s", turn.amplitude_rad_per_s, turn.amplitude_sd_rad_per_s]]
      .forEach(([id, title, values, sds]) => drawByHop(element(id), title, run.names, [{ turn, values, sds, open: false }], id === "onsets"));
  }

  // ---- the rest -------------------------------------------------------------------------------------------
  function limitTable() {
    const kinds = [...new Set(figures.limits.map((row) => row.limit))];
    const of = (name, kind) => figures.limits.find((row) => row.robot === name && row.limit === kind);
    const cell = (row) => (row ? figure(row.value, 2) + (row.used === null ? "" : " (" + figure(100 * row.used, 0) + "\u202f%)") + " at " + figure(row.at_s, 1, "s") : "–");
    table(element("limits"), ["Robot"].concat(kinds.map((kind) => kind.replace(/^max_/, "").replace(/_/g, " ") + ", " + UNITS[kind])),
      run.names.map((name) => [name].concat(kinds.map((kind) => cell(of(name, kind))))), true).forEach((row, k) => {
      row.firstChild.prepend(swatch(k));
      kinds.forEach((kind, n) => { const found = of(run.names[k], kind); if (found && found.used > 1.05) row.children[n + 1].classList.add("bad"); });
    });
  }
  const UNITS = { max_speed: "m/s", max_acceleration: "m/s²", max_braking: "m/s²", max_curvature: "1/m", max_curvature_rate: "1/(m s)", max_turn_rate: "rad/s", max_lateral_acceleration: "m/s²" };
  function lateTable() {
    const driven = figures.planned_against_driven || {};
    table(element("late"), ["Robot", "Poses every, s", "at most", "Poses late, s", "at most", "Commands every, s", "at most", "Commands late, s", "at most", "Off its plan after 1 s, m", "Beside it at most, m"],
      run.names.map((name) => [name].concat(["poses", "commands"].flatMap((kind) => ["every_median_s", "every_max_s", "late_median_s", "late_max_s"].map((key) => figure(figures.lateness[name][kind][key], 3))),
        driven[name] ? [figure(driven[name].error_m["1"], 3), figure(driven[name].beside_max_m, 3)] : ["–", "–"])), true)
      .forEach((row, k) => row.firstChild.prepend(swatch(k)));
  }
  function howTable() {
    table(element("how"), ["Robot", "Poses from", "Commands from", "Plans from", "How its motion was worked out"], run.names.map((name) => {
      const robot = figures.robots[name];
      return [name, robot.poses_from, robot.commands_from || "–", robot.plans_from || "–", robot.motion];
    })).forEach((row, k) => row.firstChild.prepend(swatch(k)));
  }
  function others() {
    return figures.stops.map((s) => ({ first: s.from_s, last: s.to_s, kind: "■ stop", who: s.robot || "everybody", text: "stood for " + figure(s.to_s - s.from_s, 1, "s") }))
      .concat(figures.gaps.map((g) => ({ first: g.from_s, last: g.to_s, kind: "▮ gap", who: g.robot, text: "no " + g.what + " for " + figure(g.to_s - g.from_s, 1, "s") + " (" + g.topic + ")" })))
      .concat(run.breaks.map((t) => ({ first: t, last: t, kind: "▮ clock", who: "", text: "the clock jumped: what lies before and after is kept apart" })));
  }

  words(); tiles(); limitTable(); lateTable(); howTable();
  const stage = makeStage(run, {
    axisTitle: "seconds since the recording began", trail: 30, spans: turns.map((turn) => ({ first: turn.from_s, last: turn.to_s })),
    rows: [
      { title: "Heading, degrees", series: (k) => run.heading[k].map((v) => (v === null ? null : v * DEG)), digits: 1, unit: "°", weight: 5 },
      { title: "Turn rate, rad/s, left positive; turns are shaded", series: (k) => run.rate[k], digits: 3, unit: " rad/s", weight: 5 },
      { title: "Speed, m/s", series: (k) => run.speed[k], digits: 2, unit: " m/s", weight: 4, zero: true },
    ],
  });
  const transport = makeTransport(stage.first, stage.last, (t) => {
    const m = stage.show(t), n = turns.findIndex((turn) => turn.from_s <= t && t <= turn.to_s);
    if (n >= 0) showTurn(n, false);
    return [(n >= 0 ? ["turn " + (n + 1)] : []).concat(stage.words(m)), stage.tooNear(m)];
  });
  turnRows(transport.goTo);
  happenings(warned(run).concat(others()), transport.goTo);
  turns.forEach((turn, n) => transport.mark(turn.from_s, turn.to_s, "turn", "turn " + (n + 1)));
  figures.gaps.forEach((g) => transport.mark(g.from_s, g.to_s, "gap", "no " + g.what + " of " + g.robot));
  run.cautions.forEach((c) => transport.mark(c.first, c.last, c.level >= 2 ? "error" : "", c.code + ": " + c.text));
  run.events.forEach((e) => transport.mark(e.time, e.time, "event", e.text));
  stage.drawAll(); showTurn(0, false); transport.goTo(turns.length ? (turns[0].from_s + turns[0].to_s) / 2 : stage.first);
  stage.charts.on("plotly_click", (event) => transport.goTo(event.points[0].x));
  stage.charts.on("plotly_afterplot", stage.placeCursor);
  element("everything").addEventListener("click", () => stage.lookAt(null));
  keepDrawn(() => { stage.drawAll(); drawTurn(); });
})();
