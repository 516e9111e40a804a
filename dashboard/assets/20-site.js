"use strict";
/* The Site page: one row per unit, worst first. */

(() => {
  const { page, element, write, keyed, priority, byId, age, duration, setCell, STALE_AFTER_S } = window.throwline;
  const SVG = "http://www.w3.org/2000/svg";
  const WIDTH = 160;
  const HEIGHT = 32;

  function svg(tag, attributes) {
    const made = document.createElementNS(SVG, tag);
    for (const [name, value] of Object.entries(attributes)) made.setAttribute(name, value);
    return made;
  }

  /* Share left over time; the ground line is the limit. A gap in the data is a gap in the line. */
  function drawLine(cell, line) {
    const seen = JSON.stringify(line);
    if (cell.dataset.seen === seen) return;
    cell.dataset.seen = seen;
    cell.textContent = "";
    if (!line) {
      cell.append(element("small", "why", "no line yet"));
      return;
    }
    const picture = svg("svg", {
      viewBox: `0 0 ${WIDTH} ${HEIGHT}`, width: WIDTH, height: HEIGHT, role: "img", "aria-label": line.words,
    });
    const top = 2;
    const ground = HEIGHT - 3;
    // The ground line is the limit; the top follows the data, or a small share would be a flat line.
    const highest = Math.max(10, 1.2 * Math.max(...line.points.filter((p) => p !== null)));
    const x = (i) => (line.points.length < 2 ? WIDTH : (i / (line.points.length - 1)) * (WIDTH - 4) + 2);
    const y = (share) => ground - (Math.max(0, share) / highest) * (ground - top);
    picture.append(svg("line", { x1: 0, x2: WIDTH, y1: ground, y2: ground, class: "ground" }));
    let run = [];
    const flush = () => {
      if (run.length === 1) run.push([run[0][0] + 0.5, run[0][1]]);
      if (run.length) picture.append(svg("polyline", { points: run.map((p) => p.join(",")).join(" "), class: "trend" }));
      run = [];
    };
    line.points.forEach((share, i) => {
      if (share === null) flush();
      else run.push([x(i).toFixed(1), y(share).toFixed(1)].map(Number));
    });
    flush();
    cell.append(picture, element("small", "span", line.span));
  }

  function makeRow(unit) {
    const row = element("tr");
    const name = element("th");
    name.scope = "row";
    const link = element("a", "unit-link", unit.id);
    link.href = `/unit/${encodeURIComponent(unit.id)}`;
    name.append(link, element("small", "", unit.name));
    row.append(name);
    for (const part of ["state", "step", "margin", "share", "line", "alarms", "blind"]) {
      const cell = element("td", `site-${part}`);
      cell.dataset.part = part;
      row.append(cell);
    }
    return row;
  }

  function fillState(cell, unit) {
    const old = age(unit.tick);
    const stale = old !== null && old > STALE_AFTER_S;
    setCell(cell, unit.state, undefined, stale ? `STALE ${duration(Math.floor(old))}` : unit.state_note);
  }

  function fillMargin(cell, unit) {
    const worst = unit.smallest;
    const seen = JSON.stringify(worst);
    if (cell.dataset.seen === seen) return;
    cell.dataset.seen = seen;
    cell.textContent = "";
    cell.classList.toggle("blind", worst.fault !== null);
    if (worst.fault !== null) {
      cell.append(element("span", "word", worst.fault), element("small", "why", worst.why));
      return;
    }
    const line = element("span", "figure");
    line.append(element("b", "number", worst.left), element("span", "unit", worst.unit), element("span", "band", worst.band));
    cell.append(line, element("small", "", worst.words));
  }

  /* What is left as a share of the span from rest to the limit; the heavy edge at the left is the limit. */
  function fillShare(cell, worst) {
    const seen = `${worst.share}/${worst.band_share}`;
    if (cell.dataset.seen === seen) return;
    cell.dataset.seen = seen;
    cell.textContent = "";
    if (worst.share === null) return;
    cell.append(window.throwline.leftBar(worst.share, worst.band_share), element("small", "", `${worst.share} % left`));
  }

  function fillAlarms(cell, unit, alarms) {
    const open = alarms.filter((a) => a.unit === unit.id);
    const seen = open.map((a) => `${a.alarm}${a.priority}${a.unacknowledged}`).join("|");
    if (cell.dataset.seen === `.${seen}`) return;
    cell.dataset.seen = `.${seen}`;
    cell.textContent = "";
    if (open.length === 0) cell.append(element("span", "quiet", "none open"));
    for (const level of [3, 2, 1, 0]) {
      const these = open.filter((a) => a.priority === level);
      if (these.length === 0) continue;
      const fresh = these.filter((a) => a.unacknowledged).length;
      const words = ["notice", "low", "medium", "high"][level];
      const line = priority(level, `${these.length} ${words}${fresh ? `, ${fresh} new` : ""}`);
      cell.append(line);
    }
  }

  function fillBlind(cell, unit) {
    const seen = unit.blind.join("|");
    if (cell.dataset.seen === `.${seen}`) return;
    cell.dataset.seen = `.${seen}`;
    cell.textContent = "";
    cell.classList.toggle("blind", unit.blind.length > 0);
    if (unit.blind.length === 0) cell.append(element("span", "quiet", "none"));
    unit.blind.slice(0, 2).forEach((text) => cell.append(element("small", "why", text)));
    if (unit.blind.length > 2) cell.append(element("small", "why", `and ${unit.blind.length - 2} more, see the unit`));
  }

  function updateRow(row, unit, blob) {
    row.classList.toggle("no-data", unit.tick === null);
    const cell = (part) => row.querySelector(`[data-part="${part}"]`);
    if (unit.tick === null) {
      setCell(cell("state"), "", ["no data yet", ""]);
      for (const part of ["step", "share", "line", "alarms", "blind"]) cell(part).textContent = "";
      setCell(cell("margin"), "", ["not evaluated", "no data yet"]);
      return;
    }
    fillState(cell("state"), unit);
    setCell(cell("step"), unit.step, unit.step_fault === null ? undefined : [unit.step_fault, unit.step_why]);
    fillMargin(cell("margin"), unit);
    fillShare(cell("share"), unit.smallest);
    drawLine(cell("line"), unit.line);
    fillAlarms(cell("alarms"), unit, blob.alarms);
    fillBlind(cell("blind"), unit);
  }

  function makeSource(source) {
    const row = element("tr");
    const name = element("th", "", source.name);
    name.scope = "row";
    row.append(name);
    for (const part of ["link", "received", "rejected", "dropped", "offset"]) {
      const cell = element("td", part === "link" ? "" : "numeric");
      cell.dataset.part = part;
      row.append(cell);
    }
    return row;
  }

  function updateSource(row, source) {
    const cell = (part) => row.querySelector(`[data-part="${part}"]`);
    setCell(cell("link"), source.link, undefined, source.detail);
    cell("link").classList.toggle("abnormal", !source.up);
    setCell(cell("received"), source.received, undefined, source.connections);
    setCell(cell("rejected"), source.rejected, undefined, source.last_rejection);
    cell("rejected").classList.toggle("abnormal", source.rejected !== "0");
    setCell(cell("dropped"), source.dropped);
    cell("dropped").classList.toggle("abnormal", source.dropped !== "0");
    setCell(cell("offset"), source.offset);
  }

  page("site", (blob) => {
    const plantOrder = document.querySelector("#plant-order input")?.checked;
    const order = plantOrder ? blob.plant_order : blob.worst_first;
    const units = order.map((id) => blob.units[id]);
    keyed(byId("site-rows"), units, (u) => u.id, makeRow, (row, unit) => updateRow(row, unit, blob));
    keyed(byId("source-rows"), blob.sources, (s) => s.name, makeSource, updateSource);
    write(byId("source-none"), blob.sources.length ? "" : "No source has reported yet.");
  });

  document.addEventListener("change", (event) => {
    if (event.target.closest("#plant-order")) window.throwline.render();
  });
})();
