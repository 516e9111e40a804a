"use strict";
/* The Alarms page: what is open, the form to acknowledge it, and the journal. */

(() => {
  const { page, element, write, show, keyed, priority, byId, TIMEOUT_MS } = window.throwline;
  const REASONS = [
    "Seen, acting on it now",
    "Known, work is planned",
    "Follows from a change of operation",
    "Instrument suspected, told to the instrument shift",
    "Handed over to day staff",
  ];

  const asked = new Map(); // alarm key -> id of the request that is on its way
  let journalMark = null;
  let journalAsked = false;

  const keyOf = (alarm) => `${alarm.unit}/${alarm.alarm}`;

  function field(label, control) {
    const box = element("label", "field");
    box.append(element("span", "", label), control);
    return box;
  }

  function reasonChooser() {
    const chooser = element("select");
    chooser.name = "reason";
    chooser.required = true;
    const none = element("option", "", "Choose a reason");
    none.value = "";
    chooser.append(none);
    REASONS.forEach((text) => {
      const option = element("option", "", text);
      option.value = text;
      chooser.append(option);
    });
    return chooser;
  }

  function textInput(name, longest, required) {
    const input = element("input");
    input.type = "text";
    input.name = name;
    input.maxLength = longest;
    input.required = required;
    input.autocomplete = "off";
    return input;
  }

  async function send(alarm, form, told) {
    const note = form.elements.note.value.trim();
    const body = {
      unit: alarm.unit,
      alarm: alarm.alarm,
      name: form.elements.name.value.trim(),
      reason: note ? `${form.elements.reason.value}: ${note}` : form.elements.reason.value,
    };
    write(told, "Asking.");
    try {
      const response = await fetch("/api/acknowledge", {
        method: "POST",
        headers: { "Content-Type": "application/json" },
        body: JSON.stringify(body),
        signal: AbortSignal.timeout(TIMEOUT_MS),
      });
      const answer = await response.json();
      if (response.status !== 202) throw new Error(answer.error || String(response.status));
      asked.set(keyOf(alarm), answer.request);
      write(told, "Asked. Waiting for the agent.");
      form.classList.remove("is-open");
      show(form, false);
      window.throwline.refresh();
    } catch (error) {
      write(told, `Not asked: ${error.name === "TimeoutError" ? "no answer within 4 s" : error.message}`);
    }
  }

  function makeForm(alarm, told, opener) {
    const form = element("form", "acknowledge");
    form.hidden = true;
    const submit = element("button", "", "Acknowledge");
    submit.type = "submit";
    const cancel = element("button", "plain", "Cancel");
    cancel.type = "button";
    form.append(
      field("Your name", textInput("name", 60, true)),
      field("Reason", reasonChooser()),
      field("Note (may stay empty)", textInput("note", 140, false)),
      submit, cancel,
    );
    form.addEventListener("submit", (event) => {
      event.preventDefault();
      send(alarm, form, told);
    });
    const close = () => {
      form.classList.remove("is-open");
      show(form, false);
      opener.focus();
    };
    cancel.addEventListener("click", close);
    form.addEventListener("keydown", (event) => event.key === "Escape" && close());
    return form;
  }

  function makeAlarm(alarm) {
    const item = element("li", "alarm");
    const told = element("span", "told");
    told.setAttribute("role", "status");
    const opener = element("button", "opener", "Acknowledge...");
    opener.type = "button";
    opener.setAttribute("aria-label", `Acknowledge ${alarm.title}, ${alarm.unit}`);
    const form = makeForm(alarm, told, opener);
    opener.addEventListener("click", () => {
      show(form, true);
      form.classList.add("is-open");
      form.elements.name.focus();
    });
    for (const part of ["priority", "state", "title", "text", "action", "since"]) {
      const box = element(part === "title" ? "h3" : "div", part);
      box.dataset.part = part;
      item.append(box);
    }
    const answer = element("div", "answer");
    answer.append(opener, told);
    item.append(answer, form);
    return item;
  }

  function updateAlarm(item, alarm) {
    const part = (name) => item.querySelector(`[data-part="${name}"]`);
    item.classList.toggle("fresh", alarm.unacknowledged);
    const mark = part("priority");
    if (mark.dataset.level !== String(alarm.priority)) {
      mark.dataset.level = alarm.priority;
      mark.replaceChildren(priority(alarm.priority));
    }
    write(part("state"), alarm.state);
    write(part("title"), `${alarm.unit}: ${alarm.title}`);
    write(part("text"), alarm.text);
    write(part("action"), alarm.action);
    write(part("since"), alarm.since);
    show(item.querySelector(".opener"), alarm.unacknowledged);
    const told = item.querySelector(".told");
    if (!alarm.unacknowledged && asked.delete(keyOf(alarm))) write(told, "");
    if (!alarm.unacknowledged) show(item.querySelector("form"), false);
  }

  function fillJournal(events) {
    keyed(
      byId("journal-rows"), events, (e) => e.key,
      (event) => {
        const row = element("tr");
        for (const text of [event.at, event.unit, event.title, event.what, event.text, event.who, event.reason]) {
          row.append(element("td", "", text));
        }
        return row;
      },
      () => undefined,
    );
    write(byId("journal-none"), events.length ? "" : "The journal is empty.");
    for (const event of events) {
      if (!event.refused) continue;
      for (const [key, request] of asked) {
        if (request !== event.request) continue;
        asked.delete(key);
        const item = Array.from(byId("alarm-list").children).find((child) => child.dataset.key === key);
        if (item) write(item.querySelector(".told"), `Refused: ${event.text}`);
      }
    }
  }

  async function askJournal(mark) {
    if (journalAsked) return;
    journalAsked = true;
    try {
      const response = await fetch("/api/journal", { signal: AbortSignal.timeout(TIMEOUT_MS) });
      if (response.ok && byId("journal-rows")) {
        fillJournal((await response.json()).events);
        journalMark = mark;
      }
    } catch {
      write(byId("journal-none"), "The journal could not be fetched; trying again.");
    }
    journalAsked = false;
  }

  page("alarms", (blob) => {
    const list = byId("alarm-list");
    if (!list) return;
    keyed(list, blob.alarms, keyOf, makeAlarm, updateAlarm);
    write(byId("alarm-none"), blob.alarms.length ? "" : "No open alarms. This says nothing about what is not evaluated: see the Site page.");
    if (blob.journal !== journalMark) askJournal(blob.journal);
  });
})();
