// Only makes better what works without it: local times, a slider, rows that keep up to date, open tables on paper.
"use strict";

const local = new Intl.DateTimeFormat(undefined, {
  year: "numeric", month: "short", day: "numeric", hour: "2-digit", minute: "2-digit", second: "2-digit", timeZoneName: "short",
});

function toLocal(root) {
  for (const time of root.querySelectorAll("time[datetime]")) {
    const date = new Date(time.dateTime);
    if (!Number.isNaN(date.getTime())) {
      time.title = time.textContent;
      time.textContent = local.format(date);
    }
  }
}

// As the server words them (src/say.rs).
function number(value) {
  if (value === 0) return "0";
  if (!Number.isFinite(value)) return "unknown";
  const rounded = Number(value.toPrecision(3));
  const magnitude = Math.floor(Math.log10(Math.abs(rounded)));
  return magnitude < -3 || magnitude >= 6
    ? rounded.toExponential(2).replace("e+", "e")
    : rounded.toFixed(Math.max(0, 2 - magnitude));
}

const UNITS = [["d", 86400, 2], ["h", 3600, 2], ["min", 60, 2], ["s", 1, 1], ["ms", 1e-3, 1], ["µs", 1e-6, 0]];

function duration(seconds) {
  const size = Number(seconds.toPrecision(3));
  const [unit, length] = UNITS.find(([, length, from]) => size >= length * from);
  return `${number(seconds / length)} ${unit}`;
}

function percent(share) {
  const p = 100 * share;
  if (p !== 0 && Math.abs(p) < 0.05) return p < 0 ? ">-0.1%" : "<0.1%";
  if (p > 99.99 && p < 100) return ">99.99%";
  return `${p > 99 && p < 100 ? p.toFixed(2) : Math.abs(p) >= 1000 ? number(p) : p.toFixed(1)}%`;
}

function trial(form) {
  const field = form.querySelector("#after");
  const slide = form.querySelector("#slide");
  const wrong = form.querySelector("#wrong");
  const table = document.getElementById("outcome");
  const [from, to, factor] = ["from", "to", "factor"].map((name) => Number(form.dataset[name]));
  const age = () => from * (to / from) ** (slide.value / 1000);
  const typed = (seconds) => duration(seconds).replace(" ", "").replace("µ", "u");
  let asking = null;
  let timer = 0;

  function stand(seconds) {
    for (const ring of document.querySelectorAll("g.asked")) {
      const [first, last, left, right] = ["from", "to", "left", "right"].map((name) => Number(ring.dataset[name]));
      const part = seconds === null ? 1 : Math.log(seconds / first) / Math.log(last / first);
      ring.setAttribute("transform", `translate(${left + Math.min(1, Math.max(0, part)) * (right - left)},0)`);
      ring.setAttribute("visibility", "visible");
    }
    if (document.activeElement !== slide) {
      const part = seconds === null ? 1 : Math.log(seconds / from) / Math.log(to / from);
      slide.value = Math.round(1000 * Math.min(1, Math.max(0, part)));
    }
    slide.setAttribute("aria-valuetext", seconds === null ? "never" : duration(seconds));
  }

  function show(answer) {
    const asked = answer.asked;
    const cells = (who) => table.querySelector(`tr[data-who=${who}]`);
    const over = (time) => (time === null ? "fewer are ever done" : duration(time));
    const row = cells("asked");
    const texts = [
      asked.give_up_after_s === null ? "never" : duration(asked.give_up_after_s),
      number(asked.rate_per_s * factor),
      percent(asked.done_share),
      asked.attempts_per_request === null ? "unknown" : number(asked.attempts_per_request),
      over(asked.p50_s),
      over(asked.p99_s),
    ];
    texts.forEach((text, i) => { row.cells[i + 1].textContent = text; });
    for (const other of table.querySelectorAll("tbody tr:not([data-who=asked])")) {
      const rate = Number(other.dataset.rate);
      const load = Number(other.dataset.load);
      other.cells[7].textContent = rate > 0 ? `${number(asked.rate_per_s / rate)}×` : "";
      other.cells[8].textContent = load > 0 && asked.attempts_per_request !== null
        ? `${number(asked.attempts_per_request / load)}×` : "";
    }
    document.getElementById("regret").textContent = percent(answer.expected_regret);
    document.getElementById("past").hidden = !answer.past_sight;
    stand(asked.give_up_after_s);
  }

  async function ask() {
    asking?.abort();
    asking = new AbortController();
    try {
      const address = `${form.dataset.ask}?give_up_after=${encodeURIComponent(field.value.trim())}`;
      const response = await fetch(address, { signal: asking.signal, headers: { Accept: "application/json" } });
      const answer = await response.json();
      field.toggleAttribute("aria-invalid", !response.ok);
      wrong.textContent = response.ok ? "" : `${answer.detail}; ${answer.remedy}`;
      if (response.ok) {
        show(answer);
        history.replaceState(null, "", `?give_up_after=${encodeURIComponent(field.value.trim())}`);
      }
    } catch (error) {
      if (error.name !== "AbortError") wrong.textContent = "No answer came. Try again in a moment.";
    }
    form.dataset.answered = field.value;
  }

  function soon() {
    clearTimeout(timer);
    timer = setTimeout(ask, 40);
  }

  slide.addEventListener("input", () => {
    field.value = typed(age());
    stand(age());
    soon();
  });
  field.addEventListener("change", ask);
  form.addEventListener("submit", (event) => {
    event.preventDefault();
    clearTimeout(timer);
    ask();
  });
  const first = table.querySelector("tr[data-who=asked]").cells[1].textContent;
  form.querySelector(".slide").hidden = false;
  const [size, unit] = first.split(" ");
  const known = UNITS.find(([name]) => name === unit);
  const start = known ? Number(size) * known[1] : null;
  slide.value = start === null ? 1000 : Math.round(1000 * Math.log(start / from) / Math.log(to / from));
  slide.setAttribute("aria-valuetext", first);
}

function live(place) {
  const button = document.getElementById("pause");
  const state = document.getElementById("state");
  let source = null;

  function start() {
    state.textContent = "Connecting.";
    source = new EventSource(place.dataset.from);
    source.onopen = () => { state.textContent = "Kept up to date."; };
    source.onmessage = (event) => {
      // Whoever reads or marks something keeps it under the eyes.
      const marked = getSelection();
      if (place.contains(document.activeElement) || (!marked.isCollapsed && place.contains(marked.anchorNode))) return;
      const box = place.querySelector(".scroll");
      const left = box ? box.scrollLeft : 0;
      // Written and escaped by the same server as this page.
      place.innerHTML = event.data;
      toLocal(place);
      const now = place.querySelector(".scroll");
      if (now) now.scrollLeft = left;
    };
    source.onerror = () => {
      state.textContent = source.readyState === EventSource.CLOSED
        ? "Not kept up to date: too many pages are open, or the session has ended. Reload to see what is new."
        : "The connection is lost; trying again.";
    };
    button.textContent = "Pause";
  }

  function stop() {
    source.close();
    source = null;
    state.textContent = "Paused.";
    button.textContent = "Go on";
  }

  button.hidden = false;
  button.addEventListener("click", () => (source ? stop() : start()));
  addEventListener("pagehide", () => source?.close());
  start();
}

toLocal(document);
const form = document.querySelector("form.try");
if (form) trial(form);
const place = document.getElementById("live");
if (place) live(place);
addEventListener("beforeprint", () => {
  for (const details of document.querySelectorAll("details")) details.open = true;
});
