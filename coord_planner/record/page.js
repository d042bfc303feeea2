"use strict";
(function () {
  const run = JSON.parse(document.getElementById("run").textContent);
  const count = run.names.length, samples = run.times.length;
  const robots = run.names.map((_, k) => k);
  const element = (id) => document.getElementById(id);

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
  function eachRobot() {
    const s = run.summary, of = (values, k) => (values || {})[run.names[k]], degrees = (v) => (v === null || v === undefined ? null : v * DEG);
    const rows = table(element("each"), ["Robot", "Turn onset, s", "Heading change, °", "End error, m", "End heading error, °", "Largest curvature, 1/m", "Highest speed, m/s"],
      robots.map((k) => [run.names[k], figure(of(s.turn_onset_s, k), 2), figure(degrees(of(s.heading_change_rad, k)), 1), figure(of(s.end_error_m, k), 3),
        figure(degrees(of(s.end_heading_error_rad, k)), 2), figure(largest(run.curvature[k]), 3), figure(largest(run.speed[k]), 2)]), true);
    rows.forEach((row, k) => row.firstChild.prepend(swatch(k)));
  }
  function allFigures() {
    const rows = [];
    Object.entries(run.summary).forEach(([key, value]) => {
      if (Array.isArray(value)) rows.push([key, value.length + " (listed above)"]);
      else if (value !== null && typeof value === "object") rows.push([key, Object.entries(value).map(([name, v]) => name + "\u00a0" + figure(v, 3)).join(", ")]);
      else rows.push([key, typeof value === "number" ? figure(value, Number.isInteger(value) ? 0 : 4) : value === null ? "–" : String(value)]);
    });
    table(element("figures"), ["Key of simulate --json", "Value"], rows).forEach(asCode);
    const facts = Object.entries(run.facts || {}).map(([key, value]) => [key, typeof value === "string" ? value : JSON.stringify(value)]);
    facts.push(["neighbours", run.edges.map((e) => run.names[e[0]] + " – " + run.names[e[1]] + (e[2] === 1 ? "" : " (" + e[2] + ")")).join(", ") || "none"]);
    table(element("facts"), ["Fact", "Value"], facts).forEach(asCode);
  }

  words(); tiles(); eachRobot(); allFigures();
  const stage = makeStage(run, {
    axisTitle: "seconds since the motion began",
    rows: [
      { title: "Heading, degrees", series: (k) => run.heading[k].map((v) => (v === null ? null : v * DEG)), digits: 1, unit: "°", weight: 5 },
      { title: "Curvature, 1/m, left positive", series: (k) => run.curvature[k], digits: 3, unit: " 1/m", weight: 5 },
      { title: "Speed, m/s", series: (k) => run.speed[k], digits: 2, unit: " m/s", weight: 4, zero: true },
    ],
  });
  if (!samples) { happenings(warned(run), () => {}); element("readout").textContent = "Nothing was recorded."; return; }
  const transport = makeTransport(stage.first, stage.last, (t) => { const m = stage.show(t); return [stage.words(m), stage.tooNear(m)]; });
  happenings(warned(run), transport.goTo);
  run.cautions.forEach((c) => transport.mark(c.first, c.last, c.level >= 2 ? "error" : "", c.code + ": " + c.text));
  run.events.forEach((e) => transport.mark(e.time, e.time, "event", e.text));
  stage.drawAll(); transport.goTo((stage.first + stage.last) / 2);
  stage.charts.on("plotly_click", (event) => transport.goTo(event.points[0].x));
  stage.charts.on("plotly_afterplot", stage.placeCursor);
  keepDrawn(stage.drawAll);
})();
