// Keeps an open page current: on "changed" it fetches the page again and
// exchanges the parts that differ. Everything works without it.
"use strict";
(() => {
  const every = Number(document.body.dataset.every) * 1000;
  const lost = document.getElementById("lost");
  let stream = null, timer = 0, last = 0, busy = false, again = false, since = null, wait = 3000;

  const parts = (doc) => new Map([...doc.querySelectorAll("[data-part]")].map((e) => [e.id, e.outerHTML]));
  let shown = parts(document);

  function text(id, value) {
    const e = document.getElementById(id);
    if (e && e.textContent !== value) e.textContent = value; // a live region speaks only on change
  }

  // exchange replaces one part and gives the focus back to what had it.
  function exchange(old, fresh) {
    const f = document.activeElement;
    const href = old.contains(f) && f.getAttribute("href");
    old.replaceWith(document.adoptNode(fresh));
    if (href) fresh.querySelector(`a[href="${CSS.escape(href)}"]:not([tabindex])`)?.focus({ preventScroll: true });
  }

  function show(doc) {
    document.title = doc.title;
    document.getElementById("health").dataset.level = doc.getElementById("health").dataset.level;
    for (const id of ["condition", "detail", "taken"]) text(id, doc.getElementById(id).textContent);
    const now = parts(doc);
    const same = now.size === shown.size && [...now.keys()].every((id) => shown.has(id)) &&
      (document.getElementById("fault")?.textContent === doc.getElementById("fault")?.textContent);
    if (!same) {
      document.getElementById("live").replaceWith(document.adoptNode(doc.getElementById("live")));
    } else {
      for (const [id, html] of now) {
        if (html !== shown.get(id)) exchange(document.getElementById(id), doc.getElementById(id));
      }
    }
    shown = now;
  }

  function found() { since = null; lost.hidden = true; }
  function missed() {
    since ??= new Date();
    lost.textContent = `No connection to the service since ${since.toLocaleTimeString()}: what you see is old.`;
    lost.hidden = false;
  }

  async function refresh() {
    timer = 0;
    if (busy) { again = true; return; }
    busy = true;
    last = Date.now();
    try {
      const r = await fetch(location.href, { cache: "no-store", signal: AbortSignal.timeout(10000) });
      if (!r.ok) throw new Error(r.statusText);
      show(new DOMParser().parseFromString(await r.text(), "text/html"));
      found();
    } catch { missed(); }
    busy = false;
    if (again) { again = false; plan(); }
  }

  function plan() {
    if (!timer && !document.hidden) timer = setTimeout(refresh, Math.max(0, last + every - Date.now()));
  }

  function open() {
    if (stream || document.hidden) return;
    stream = new EventSource("/events");
    stream.addEventListener("hello", () => { wait = 3000; plan(); });
    stream.addEventListener("changed", plan);
    stream.onerror = () => {
      plan(); // the fetch tells a full house from a lost service
      if (stream?.readyState !== EventSource.CLOSED) return;
      stream = null;
      setTimeout(open, wait = Math.min(2 * wait, 30000));
    };
  }

  // A hidden page frees its connection.
  document.addEventListener("visibilitychange", () => {
    if (document.hidden) { stream?.close(); stream = null; } else { plan(); open(); }
  });
  addEventListener("pagehide", () => { stream?.close(); stream = null; });
  addEventListener("pageshow", open);
  open();
})();
