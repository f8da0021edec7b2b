// Keeps a page up to date. Everything works without it; the server makes every word and figure.
"use strict";

const zone = new Intl.DateTimeFormat(undefined, { timeZoneName: "long" });
const clock = new Intl.DateTimeFormat(undefined, {
  year: "numeric", month: "2-digit", day: "2-digit", hour: "2-digit", minute: "2-digit", second: "2-digit", hourCycle: "h23",
  timeZoneName: "short",
});

// Times in the zone of whoever looks, with its name.
function showTimes(root) {
  for (const time of root.querySelectorAll("time[datetime]")) {
    const part = Object.fromEntries(clock.formatToParts(new Date(time.dateTime)).map((each) => [each.type, each.value]));
    time.textContent = `${part.year}-${part.month}-${part.day} ${part.hour}:${part.minute}:${part.second} ${part.timeZoneName}`;
  }
  for (const name of root.querySelectorAll("[data-zone]")) {
    name.textContent = zone.formatToParts(new Date()).find((part) => part.type === "timeZoneName").value;
  }
}

// Puts the live parts of a fresh page in the place of those shown; what somebody is typing in stays.
function exchange(fresh) {
  let found = false;
  for (const part of document.querySelectorAll("[data-live]")) {
    const next = fresh.getElementById(part.id);
    if (!next) continue;
    found = true;
    showTimes(next);
    if (next.innerHTML === part.innerHTML || part.contains(document.activeElement) && part.querySelector("form :focus")) continue;
    const focused = part.contains(document.activeElement) ? document.activeElement.getAttribute("href") : null;
    part.replaceChildren(...next.childNodes);
    if (focused) part.querySelector(`a[href="${CSS.escape(focused)}"]`)?.focus();
  }
  return found;
}

// Fields that stay say whether what they hold is right.
function markFields(form, fresh) {
  for (const field of form.elements) {
    const next = field.id && fresh.getElementById(field.id);
    if (!next) continue;
    if (next.hasAttribute("aria-invalid")) field.setAttribute("aria-invalid", "true");
    else field.removeAttribute("aria-invalid");
  }
}

let running = null;

async function fetched(address) {
  running?.abort();
  running = new AbortController();
  const answer = await fetch(address, { signal: running.signal, headers: { "X-Requested-With": "page" } });
  if (answer.redirected && new URL(answer.url).pathname === "/sign-in") {
    location.assign(answer.url);
    return null;
  }
  return new DOMParser().parseFromString(await answer.text(), "text/html");
}

async function lookAgain() {
  try {
    const fresh = await fetched(location.href);
    if (fresh && !exchange(fresh)) say(`Out of date: ${fresh.querySelector("h1")?.textContent ?? "the service gave no page"}.`);
  } catch (error) {
    if (error.name !== "AbortError") say("The service cannot be reached; this page may be out of date.");
  }
}

// A page that waits for something to be computed looks again after so many seconds, for as long as it says so.
function waitForMore() {
  const part = document.querySelector("[data-again]");
  if (part) setTimeout(() => lookAgain().then(waitForMore), 1000 * part.dataset.again);
}

function say(words) {
  document.getElementById("stream").textContent = words;
}

// Looks again soon after something has changed, at most once a second. A hidden page lets its connection go, for
// browsers keep only a few to one host.
function follow(address) {
  let source = null, waiting = null, last = 0;
  const soon = () => {
    waiting ??= setTimeout(() => { waiting = null; last = Date.now(); lookAgain(); }, Math.max(100, last + 1000 - Date.now()));
  };
  const open = () => {
    source = new EventSource(address);
    source.addEventListener("test", soon);
    source.onopen = () => say("Live: this page follows what comes in.");
    source.onerror = () => {
      say("Not connected; trying again.");
      if (source.readyState === EventSource.CLOSED) setTimeout(() => { if (!document.hidden) { close(); open(); lookAgain(); } }, 5000);
    };
  };
  const close = () => { source?.close(); source = null; };
  document.addEventListener("visibilitychange", () => {
    if (document.hidden) close();
    else if (!source) { open(); soon(); }
  });
  open();
}

// A form whose answer is shown while one types.
function answerWhileTyping(form) {
  let waiting = null;
  const ask = () => {
    const address = `${form.action}?${new URLSearchParams(new FormData(form))}`;
    fetched(address).then((fresh) => {
      if (!fresh) return;
      exchange(fresh);
      markFields(form, fresh);
      history.replaceState(null, "", address);
    }, () => {});
  };
  form.addEventListener("input", () => { clearTimeout(waiting); waiting = setTimeout(ask, 250); });
}

showTimes(document);
if (document.body.dataset.stream) follow(document.body.dataset.stream);
for (const form of document.querySelectorAll("form[data-while-typing]")) answerWhileTyping(form);
waitForMore();
for (const button of document.querySelectorAll("button[data-print]")) {
  button.hidden = false;
  button.addEventListener("click", () => window.print());
}
