// Keeps the screen as the daemon has it: asks for the same text again when
// something was committed, and puts the parts in place that may change. Every
// screen works without it.
"use strict";
(() => {
  const news = document.getElementById("news");
  let turn = 0; // of the latest text asked for
  let said = ""; // what was last said

  // writing reports whether somebody fills something in within an element.
  const writing = (part) => [...part.querySelectorAll("input:not([type=hidden]), textarea, select")].some((field) =>
    field === document.activeElement ||
    (field.tagName === "SELECT" ? [...field.options].some((o) => o.selected !== o.defaultSelected && o.value) : field.value !== field.defaultValue));

  // name of the element that has the focus, to find it again in a new text.
  const nameOf = (e) => !e || e === document.body ? null : e.id ? "#" + CSS.escape(e.id) : e.getAttribute("href") ? `a[href="${CSS.escape(e.getAttribute("href"))}"]` : null;

  const put = (text) => {
    const next = new DOMParser().parseFromString(text, "text/html");
    for (const part of document.querySelectorAll("[data-part]")) {
      const fresh = next.querySelector(`[data-part="${part.dataset.part}"]`);
      if (!fresh || writing(part) || fresh.innerHTML === part.innerHTML) continue;
      const held = part.contains(document.activeElement);
      const focus = held ? nameOf(document.activeElement) : null;
      if (held && !focus) continue; // it could not be given back
      const open = [...part.querySelectorAll("details[open]")].map((d) => d.id);
      const aside = [...part.querySelectorAll(".picture, .wide")].map((e) => e.scrollLeft);
      part.replaceChildren(...fresh.childNodes);
      for (const id of open) document.getElementById(id)?.setAttribute("open", "");
      part.querySelectorAll(".picture, .wide").forEach((e, i) => { e.scrollLeft = aside[i] || 0; });
      if (focus) part.querySelector(focus)?.focus({ preventScroll: true });
    }
    const live = document.getElementById("live");
    if (live) live.textContent = "What is new shows by itself.";
    document.title = next.title;
  };

  // ask fetches a screen and puts its parts in place; the latest one wins.
  const ask = async (url) => {
    const mine = ++turn;
    let answer;
    try {
      answer = await fetch(url, { headers: { Accept: "text/html" } });
    } catch {
      return; // the daemon is away; the stream says when it is back
    }
    if (mine !== turn) return;
    if (new URL(answer.url).pathname !== new URL(url, location.href).pathname) {
      location.reload(); // to sign in again
      return;
    }
    const text = await answer.text();
    if (mine === turn && answer.ok) put(text);
  };

  // The stream of news.
  let missed = false;
  const again = () => {
    if (document.hidden) {
      missed = true;
      return;
    }
    missed = false;
    ask(location.href);
  };
  document.addEventListener("visibilitychange", () => { if (missed) again(); });
  const stream = new EventSource("/live");
  stream.addEventListener("open", again); // what came before it was open
  stream.addEventListener("news", (e) => {
    if (said && e.data !== said) {
      news.textContent = e.data;
      setTimeout(() => { if (news.textContent === e.data) news.textContent = ""; }, 12000);
    }
    said = e.data;
    again();
  });
  addEventListener("pagehide", () => stream.close());

  // Finding by typing.
  const find = document.querySelector("form[data-find]");
  if (find) {
    let wait;
    find.querySelector("input[type=search]").addEventListener("input", () => {
      clearTimeout(wait);
      wait = setTimeout(() => {
        const url = new URL(find.action);
        for (const [key, value] of new FormData(find)) if (value) url.searchParams.set(key, value);
        history.replaceState(null, "", url);
        ask(url.href);
      }, 180);
    });
  }

  // An act is sent once.
  document.addEventListener("submit", (e) => {
    const form = e.target;
    if (!form.matches("form.act")) return;
    if (form.dataset.sent) {
      e.preventDefault();
      return;
    }
    form.dataset.sent = "yes";
    form.querySelector("button").setAttribute("aria-disabled", "true");
  });
  addEventListener("pageshow", () => {
    for (const form of document.querySelectorAll("form.act[data-sent]")) {
      delete form.dataset.sent;
      form.querySelector("button").removeAttribute("aria-disabled");
    }
  });
})();
