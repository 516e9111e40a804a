"use strict";
/* The Unit page: margin rows, and the curves of the one cylinder that was asked for. */

(() => {
  const { page, element, write, show, byId, setCell, leftBar, setLeftBar, TIMEOUT_MS } = window.throwline;
  const CURVES_EVERY_MS = 2000;

  let chosen = null; // cylinder number
  let drawn = null; // "unit/cylinder/tick" of what stands on screen
  let lastAsked = 0;
  let asking = false;
  let latest = null;

  function fillMargin(row, margin) {
    const seen = JSON.stringify(margin);
    if (row.dataset.seen === seen) return;
    row.dataset.seen = seen;
    const part = (name) => row.querySelector(`[data-part="${name}"]`);
    const blind = margin.fault !== null;
    write(part("where"), margin.where);
    if (blind) setCell(part("left"), "", [margin.fault, margin.why]);
    else setCell(part("left"), margin.left_with_unit, undefined, margin.band);
    write(part("now"), blind ? "" : `now ${margin.now}`);
    write(part("limit"), margin.limit);
    write(part("source"), margin.source);
    row.classList.toggle("is-over", !blind && margin.share <= 0);
    const place = part("bar");
    show(place, !blind);
    if (blind) return;
    if (!place.firstElementChild) place.append(leftBar(margin.share, margin.band_share));
    setLeftBar(place.firstElementChild, margin.share, margin.band_share);
  }

  function fillWords(root, unit) {
    const part = (name) => root.querySelector(`[data-unit-part="${name}"]`);
    setCell(part("state"), unit.state, undefined, unit.state_note);
    setCell(part("step"), unit.step, unit.step_fault === null ? undefined : [unit.step_fault, unit.step_why]);
  }

  function fillBlind(unit) {
    const box = byId("blind-inputs");
    const seen = unit.blind.join("|");
    if (!box || box.dataset.seen === `.${seen}`) return;
    box.dataset.seen = `.${seen}`;
    box.textContent = "";
    box.classList.toggle("blind", unit.blind.length > 0);
    const words = unit.blind.length ? unit.blind : ["All inputs have usable readings."];
    words.forEach((text) => box.append(element("li", "", text)));
  }

  function fillAlarms(blob, unitId) {
    const box = byId("unit-alarms");
    if (!box) return;
    const open = blob.alarms.filter((a) => a.unit === unitId);
    const seen = JSON.stringify(open.map((a) => [a.alarm, a.priority, a.state, a.text]));
    if (box.dataset.seen === seen) return;
    box.dataset.seen = seen;
    box.textContent = "";
    if (open.length === 0) box.append(element("li", "quiet", "No open alarms."));
    for (const alarm of open) {
      const line = element("li", alarm.unacknowledged ? "fresh" : "");
      line.append(window.throwline.priority(alarm.priority), element("span", "", ` ${alarm.title}: ${alarm.state}. ${alarm.text}`));
      box.append(line);
    }
  }

  /* Figures name their colours by the page's own variables, so that light and dark are decided in one place. */
  function coloured(node, style) {
    if (typeof node === "string") return node.startsWith("--") ? style.getPropertyValue(node).trim() : node;
    if (Array.isArray(node)) return typeof node[0] === "number" ? node : node.map((n) => coloured(n, style));
    if (node === null || typeof node !== "object") return node;
    return Object.fromEntries(Object.entries(node).map(([key, value]) => [key, coloured(value, style)]));
  }

  function draw(answer) {
    const charts = byId("charts");
    if (!charts) return;
    latest = answer;
    const blind = answer.fault !== null;
    show(byId("curves-blind"), blind);
    show(charts, !blind);
    if (blind) {
      write(byId("curves-blind"), answer.fault.filter(Boolean).join(": "));
      return;
    }
    const style = getComputedStyle(document.documentElement);
    for (const [name, figure] of Object.entries(answer.figures)) {
      const box = byId(name);
      const plot = box && box.querySelector(".js-plotly-plot");
      if (!plot || !window.Plotly) {
        drawn = null; // the chart library is still on its way: draw at the next tick
        continue;
      }
      window.Plotly.react(plot, coloured(figure.data, style), coloured(figure.layout, style));
      box.setAttribute("aria-label", figure.words);
      write(byId(`${name}-words`), figure.words);
    }
    write(byId("curves-of"), answer.as_of);
  }

  async function askCurves(unitId, tick) {
    const wanted = `${unitId}/${chosen}/${tick}`;
    const soon = performance.now() - lastAsked < CURVES_EVERY_MS && drawn && drawn.startsWith(`${unitId}/${chosen}/`);
    if (asking || chosen === null || wanted === drawn || soon) return;
    asking = true;
    lastAsked = performance.now();
    const of = chosen;
    try {
      const response = await fetch(`/api/curves/${encodeURIComponent(unitId)}/${of}`, {
        signal: AbortSignal.timeout(TIMEOUT_MS),
      });
      if (!response.ok) throw new Error(String(response.status));
      const answer = await response.json();
      if (of === chosen) {
        drawn = `${unitId}/${of}/${answer.tick}`;
        draw(answer);
      }
    } catch {
      write(byId("curves-of"), "curves could not be fetched");
    }
    asking = false;
  }

  function chooseFirst(unit, chooser) {
    const asked = /^#cylinder=(\d+)$/.exec(location.hash);
    const worst = /^cylinder(\d+)$/.exec(unit.smallest.subject || "");
    const options = Array.from(chooser.options, (o) => o.value);
    const wanted = [asked && asked[1], worst && worst[1], options[0]].find((n) => n && options.includes(n));
    chooser.value = wanted;
    chosen = Number(wanted);
  }

  page("unit", (blob, root) => {
    const unit = blob.units[root.dataset.unit];
    if (!unit || unit.tick === null) {
      write(byId("curves-blind"), "not evaluated: no data yet");
      show(byId("curves-blind"), true);
      show(byId("charts"), false);
      return;
    }
    const chooser = byId("cylinder");
    if (!chooser) return;
    if (chosen === null) chooseFirst(unit, chooser);
    for (const row of root.querySelectorAll("[data-margin]")) {
      const margin = unit.margins[row.dataset.margin];
      if (margin) fillMargin(row, margin);
    }
    fillWords(root, unit);
    fillBlind(unit);
    fillAlarms(blob, unit.id);
    askCurves(unit.id, unit.tick);
  });

  document.addEventListener("change", (event) => {
    if (event.target.id !== "cylinder") return;
    chosen = Number(event.target.value);
    history.replaceState(null, "", `#cylinder=${chosen}`);
    drawn = null;
    window.throwline.render();
  });

  matchMedia("(prefers-color-scheme: dark)").addEventListener("change", () => latest && draw(latest));
})();
