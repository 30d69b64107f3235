"use strict";
// Renews the live part of a page, says how old it is, and listens for single keys.
// Without it every page can be read and every order given.
(() => {
  const seen = document.getElementById("seen");
  const live = document.getElementById("live");
  const lost = document.getElementById("lost");
  const hold = document.getElementById("hold");
  const LATE_S = 15;
  let held = false, asking = false, at = Date.now(), failures = 0;

  function age() {
    if (!seen) return;
    const seconds = Math.round((Date.now() - at) / 1000);
    seen.textContent = held ? `Held still; seen ${seconds} s ago.` : `Seen ${seconds} s ago.`;
    seen.classList.toggle("old", seconds > LATE_S);
  }

  function say(text) {
    if (!lost) return;
    lost.hidden = text === "";
    // Set only when it changes, or a reader would hear it again and again.
    if (lost.textContent !== text) lost.textContent = text;
  }

  function exchange(place, part) {
    const focused = place.contains(document.activeElement) ? document.activeElement : null;
    const href = focused && focused.getAttribute("href");
    const row = focused && focused.closest("tr") ? focused.closest("tr").id : "";
    place.replaceChildren(...part.childNodes);
    if (!href) return;
    const inside = (row && document.getElementById(row)) || place;
    const again = [...inside.querySelectorAll("a")].find((link) => link.getAttribute("href") === href);
    if (again) again.focus({ preventScroll: true });
  }

  function put(text) {
    const parts = new DOMParser().parseFromString(text, "text/html").querySelectorAll("[data-for]");
    // What has come to its end is drawn anew as a whole, with what it came to.
    if ([...parts].some((part) => "ended" in part.dataset)) return location.reload();
    for (const part of parts) {
      const place = document.getElementById(part.dataset.for);
      // What did not change is left alone: a reader is not told twice, a selection stays.
      if (place && place.innerHTML !== part.innerHTML) exchange(place, part);
    }
    const sentence = document.getElementById("sentence");
    if (sentence) document.title = `${sentence.textContent} · Bidkeel watch`;
  }

  async function renew() {
    if (asking || held || document.hidden) return;
    asking = true;
    try {
      const answer = await fetch(seen.dataset.part + location.search, {
        headers: { "X-Part": "1" }, cache: "no-store", redirect: "error", signal: AbortSignal.timeout(8000),
      });
      if (answer.status === 401) {
        location.assign("/watch/sign-in?next=" + encodeURIComponent(location.pathname));
        return;
      }
      if (!answer.ok) throw new Error(String(answer.status));
      const text = await answer.text();
      if (!held) put(text);
      at = Date.now() - Number(answer.headers.get("X-Age-Ms") || 0);
      failures = 0;
      say("");
      document.dispatchEvent(new Event("renewed"));
    } catch {
      failures += 1;
      if (failures > 1) say("No connection to the service. What you see is old; it is tried again every few seconds.");
    } finally {
      asking = false;
      age();
    }
  }

  if (seen && live) {
    hold.hidden = false;
    const toggle = () => {
      held = !held;
      hold.textContent = held ? "Go on" : "Hold still";
      hold.setAttribute("aria-pressed", String(held));
      age();
      renew();
    };
    hold.addEventListener("click", toggle);
    document.addEventListener("visibilitychange", renew);
    setInterval(renew, Number(seen.dataset.every) * 1000);
    setInterval(age, 1000);
    age();
    document.addEventListener("hold", toggle);
  }

  const single = document.getElementById("single-keys");
  if (single) {
    single.checked = localStorage.getItem("single-keys") !== "off";
    single.addEventListener("change", () => localStorage.setItem("single-keys", single.checked ? "on" : "off"));
  }

  function step(by) {
    const links = [...document.querySelectorAll("#line-items a.item")];
    const row = document.activeElement ? document.activeElement.closest("#line-items tr") : null;
    const now = links.findIndex((link) => row && row.contains(link));
    const next = links[Math.min(Math.max(now + by, 0), links.length - 1)];
    if (next) next.focus();
  }

  function order(name) {
    const row = document.activeElement ? document.activeElement.closest("#line-items tr") : null;
    const page = document.getElementById("line-item");
    const item = row ? row.dataset.lineItem : page ? page.dataset.lineItem : "";
    if (item) location.assign(`/watch/line-items/${item}/${name}`);
  }

  const keys = {
    "/": () => { const field = document.getElementById("search"); if (field) field.focus(); },
    "j": () => step(1), "k": () => step(-1),
    "f": () => order("freeze"), "t": () => order("thaw"),
    "h": () => location.assign("/watch"),
    "p": () => document.dispatchEvent(new Event("hold")),
    "?": () => { const list = document.getElementById("shortcuts"); list.open = !list.open; if (list.open) list.querySelector("summary").focus(); },
  };
  document.addEventListener("keydown", (event) => {
    if (!single || !single.checked || event.ctrlKey || event.metaKey || event.altKey) return;
    if (event.target.closest("input, textarea, select")) return;
    const does = keys[event.key];
    if (!does) return;
    event.preventDefault();
    does();
  });
})();
