"use strict";
/* The live loop: one request a tick, shared by every page. Files in this folder load in the order of their names.

   A page registers what it does with a blob; this file fetches it, writes numbers into elements that carry a
   data-live key and keeps the age of the data in the header. Nothing here knows a unit of measure: every number
   arrives as the text to be shown. */

window.throwline = (() => {
  const STALE_AFTER_S = 5;
  const TIMEOUT_MS = 4000;
  const RETRY_MS = 1000;
  const RELOAD_AFTER_MS = 24 * 3600 * 1000;

  const pages = new Map();
  const loaded = performance.now();
  let blob = null;
  let pagesAtLoad = null;
  let etag = null;
  let inFlight = false;
  let timer = null;
  let serverNow = null; // the server's clock, seconds, as of `heardAt` of our own stopwatch
  let heardAt = 0;
  let linkFault = "";

  const byId = (id) => document.getElementById(id);

  /* Only touch what changed: a wall screen runs for a month. */
  function write(element, text) {
    if (element && element.textContent !== text) element.textContent = text;
  }

  function element(tag, className, text) {
    const made = document.createElement(tag);
    if (className) made.className = className;
    if (text !== undefined) made.textContent = text;
    return made;
  }

  function show(target, wanted) {
    if (target && target.hidden === wanted) target.hidden = !wanted;
  }

  /* Keep one child per key, in the order given; a child that stays is updated, never remade, so that a form in it
     keeps what was typed and a reader keeps its place. */
  function keyed(parent, items, keyOf, make, update) {
    const old = new Map(Array.from(parent.children, (child) => [child.dataset.key, child]));
    let place = parent.firstElementChild;
    for (const item of items) {
      const key = keyOf(item);
      let child = old.get(key);
      old.delete(key);
      if (!child) {
        child = make(item);
        child.dataset.key = key;
      }
      if (child === place) place = place.nextElementSibling;
      else parent.insertBefore(child, place);
      update(child, item);
    }
    for (const gone of old.values()) gone.remove();
  }

  const PRIORITIES = ["Notice", "Low", "Medium", "High"];

  /* Stacked bars beside the word: three for high, two for medium, one for low. */
  function priority(level, text) {
    const mark = element("span", `priority priority-${level}`);
    const bars = element("span", "bars");
    bars.setAttribute("aria-hidden", "true");
    for (let i = 0; i < level; i += 1) bars.append(element("i"));
    mark.append(bars, element("span", "", text === undefined ? PRIORITIES[level] : text));
    return mark;
  }

  function setCell(cell, text, fault, note) {
    const seen = fault === undefined ? `${text}|${note || ""}` : `!${fault}`;
    if (cell.dataset.seen === seen) return;
    cell.dataset.seen = seen;
    cell.classList.toggle("blind", fault !== undefined);
    if (fault === undefined) {
      cell.textContent = text;
      if (note) cell.append(element("small", "note", note));
      return;
    }
    const [word, why] = fault;
    cell.textContent = "";
    cell.append(element("span", "word", word));
    if (why) cell.append(element("small", "why", why));
  }

  /* In a table of numbers a reason stands once, below, and its letter at every cell it explains. */
  function footnotes(root) {
    const cards = new Map();
    return {
      mark(cell, why) {
        const holder = cell.closest("[data-footnoted]")?.querySelector("[data-footnotes]");
        if (!holder || !why) return why;
        const list = cards.get(holder) || [];
        cards.set(holder, list);
        if (!list.includes(why)) list.push(why);
        cell.title = why;
        return String.fromCharCode(97 + (list.indexOf(why) % 26));
      },
      write() {
        for (const holder of root.querySelectorAll("[data-footnotes]")) {
          const list = cards.get(holder) || [];
          write(holder, list.map((why, i) => `${String.fromCharCode(97 + (i % 26))}: ${why}`).join("; "));
        }
      },
    };
  }

  function fillNumbers(root) {
    const notes = footnotes(root);
    for (const cell of root.querySelectorAll("[data-live]")) {
      const [unitId, key] = cell.dataset.live.split("/");
      const unit = blob.units[unitId];
      if (key.endsWith(".u")) {
        write(cell, (unit && unit.values && unit.values[key]) || "");
        continue;
      }
      if (!unit || unit.tick === null) {
        setCell(cell, "", ["no data yet", ""]);
        continue;
      }
      const fault = blob.reasons[unit.faults[key]];
      if (!fault && cell.title) cell.removeAttribute("title");
      setCell(cell, unit.values[key] ?? "", fault && [fault[0], notes.mark(cell, fault[1])], unit.notes[key]);
    }
    notes.write();
  }

  function now() {
    return serverNow === null ? null : serverNow + (performance.now() - heardAt) / 1000;
  }

  /* Data ahead of the server's clock (which was set back) is as old as it is ahead: the agent waits until then. */
  function age(tick) {
    const at = now();
    return at === null || tick === null || tick === undefined ? null : Math.abs(at - tick);
  }

  function duration(seconds) {
    if (seconds < 10) return `${seconds.toFixed(1)} s`;
    if (seconds < 120) return `${Math.floor(seconds)} s`;
    if (seconds < 7200) return `${Math.floor(seconds / 60)} min`;
    return `${Math.floor(seconds / 3600)} h`;
  }

  function showAge() {
    const box = byId("data-age");
    if (!box) return;
    const oldest = blob ? age(blob.tick) : null;
    const stale = (oldest !== null && oldest > STALE_AFTER_S) || (linkFault !== "" && oldest === null);
    box.classList.toggle("is-stale", stale);
    if (oldest === null) write(box, linkFault ? "STALE: no answer from the pages' server" : "no data yet");
    else write(box, stale ? `STALE ${duration(oldest)}` : `data ${duration(oldest)} old`);
    document.body.classList.toggle("stale", stale);
    const banner = byId("stale-banner");
    show(banner, stale);
    if (stale && banner) {
      const why = linkFault || "the agent has stored nothing newer";
      const asOf = blob && blob.as_of ? ` Everything below is as of ${blob.as_of}.` : "";
      write(banner, `STALE: ${why}.${asOf} Use the control system.`);
    }
  }

  function showCounts() {
    const box = byId("alarm-counts");
    if (!box) return;
    const open = blob.alarms.filter((a) => a.priority > 0);
    const key = [3, 2, 1].map((p) => open.filter((a) => a.priority === p).length);
    const unseen = open.filter((a) => a.unacknowledged).length;
    const seen = `${key}/${unseen}`;
    if (box.dataset.seen === seen) return;
    box.dataset.seen = seen;
    box.textContent = "";
    if (open.length === 0) box.append(element("span", "", "no open alarms"));
    [3, 2, 1].forEach((level, i) => {
      if (key[i]) box.append(priority(level, `${key[i]} ${PRIORITIES[level].toLowerCase()}`));
    });
    if (unseen) box.append(element("strong", "", `${unseen} to acknowledge`));
  }

  function showNote() {
    const box = byId("agent-note");
    show(box, blob.note !== "");
    write(box, blob.note);
  }

  function showTitle(page) {
    const open = blob ? blob.alarms.filter((a) => a.unacknowledged).length : 0;
    const mark = open ? `(${open}) ` : "";
    const title = `${mark}${page ? page.dataset.title : ""} - ${document.body.dataset.site || "Throwline"}`;
    if (document.title !== title) document.title = title;
  }

  function render() {
    const page = document.querySelector("[data-page]");
    showTitle(page);
    showAge();
    if (!blob || !page) return;
    showCounts();
    showNote();
    fillNumbers(page);
    const own = pages.get(page.dataset.page);
    if (own) own(blob, page);
  }

  function schedule(delayMs) {
    clearTimeout(timer);
    timer = setTimeout(tick, delayMs);
  }

  function hear(response) {
    const told = Number(response.headers.get("Throwline-Now"));
    if (told > 0) {
      serverNow = told;
      heardAt = performance.now();
    }
    return Number(response.headers.get("Throwline-Next-Ms")) || RETRY_MS;
  }

  function mayReload() {
    return !document.querySelector("form.is-open") && !document.hidden;
  }

  function take(next) {
    // Another site file or another version of these pages: the layout on screen no longer fits the blob.
    pagesAtLoad ??= next.pages;
    if (pagesAtLoad !== next.pages && mayReload()) location.reload();
    blob = next;
  }

  async function tick() {
    if (inFlight || document.hidden) return;
    inFlight = true;
    let delay = RETRY_MS;
    try {
      const response = await fetch("/api/live", {
        cache: "no-cache", // the browser asks with the tag it holds and keeps the body when nothing is new
        signal: AbortSignal.timeout(TIMEOUT_MS),
      });
      if (response.status !== 200) throw new Error(`the pages' server answered ${response.status}`);
      const named = response.headers.get("ETag");
      if (named !== etag) {
        const next = await response.json();
        etag = named;
        take(next);
      }
      delay = hear(response);
      linkFault = "";
    } catch (error) {
      linkFault = error.name === "TimeoutError" ? "no answer within 4 s" : "no answer from the pages' server";
    }
    inFlight = false;
    render();
    if (performance.now() - loaded > RELOAD_AFTER_MS && mayReload() && !linkFault) location.reload();
    schedule(delay);
  }

  function start() {
    document.addEventListener("visibilitychange", () => {
      if (!document.hidden) tick();
    });
    // The page of another address arrives in the same document: fill it at once, without waiting for a tick.
    let shown = null;
    new MutationObserver(() => {
      const page = document.querySelector("[data-page]");
      if (!page || page === shown) return;
      const first = shown === null;
      shown = page;
      const frame = document.querySelector("[data-site]");
      if (frame) document.body.dataset.site = frame.dataset.site;
      render();
      if (!first) byId("content")?.focus({ preventScroll: true });
    }).observe(document.body, { childList: true, subtree: true });
    setInterval(showAge, 250);
    tick();
  }

  if (document.readyState === "loading") document.addEventListener("DOMContentLoaded", start);
  else start();

  return {
    page: (name, update) => pages.set(name, update),
    render,
    refresh: () => schedule(0),
    byId, write, element, show, keyed, priority, setCell, age, duration,
    STALE_AFTER_S, TIMEOUT_MS,
    current: () => blob,
  };
})();
