// Keeps a page up to date while jobs run. Without it every page works: load it again to see what has changed.
"use strict";
(() => {
  const live = document.getElementById("live");
  if (!live) return;
  const SOON = 1000, LATER = 5000;
  let failures = 0;

  const say = (words) => { if (live.textContent !== words) live.textContent = words; };
  const later = (work, pause) => setTimeout(() => (document.hidden ? later(work, pause) : work()), pause);
  const ask = async (address, accept) => {
    const answer = await fetch(address, { headers: { Accept: accept }, credentials: "same-origin", redirect: "follow" });
    if (answer.redirected && new URL(answer.url).pathname === "/sign-in") { location.reload(); throw new Error("signed out"); }
    if (!answer.ok) throw new Error(String(answer.status));
    return answer;
  };
  const attempt = (work) => async () => {
    let pause;
    try { pause = await work(); failures = 0; } catch {
      failures += 1;
      say("The service does not answer; this page tries again.");
      pause = Math.min(SOON * 2 ** failures, 30000);
    }
    if (pause) later(attempt(work), pause);
  };

  const oneJob = async () => {
    const job = await (await ask(live.dataset.job, "application/json")).json();
    if (job.ended) { say("It has ended; the result is loaded."); location.reload(); return 0; }
    const bar = document.querySelector("#progress progress"), stage = document.querySelector("#progress .stage");
    if (job.progress && bar && stage) { bar.max = job.progress.of; bar.value = job.progress.done; }
    if (job.state !== document.querySelector("#part-state .mark").textContent || (job.progress && !bar)) { location.reload(); return 0; }
    return SOON;
  };
  const list = async () => {
    const text = await (await ask(live.dataset.live, "text/html")).text();
    const other = new DOMParser().parseFromString(text, "text/html");
    const part = document.getElementById("part"), fresh = other.getElementById("part"), state = other.getElementById("live");
    if (!part || !fresh || !state) return 0;
    if (part.innerHTML !== fresh.innerHTML) {
      const focused = part.contains(document.activeElement) ? document.activeElement.id : "";
      part.replaceChildren(...fresh.childNodes);
      if (focused) document.getElementById(focused)?.focus();
    }
    live.dataset.active = state.dataset.active;
    say(state.dataset.active === "yes" ? "Updates by itself." : "");
    return state.dataset.active === "yes" ? SOON : LATER;
  };

  if (live.dataset.job) later(attempt(oneJob), 400);
  else if (live.dataset.live) {
    say(live.dataset.active === "yes" ? "Updates by itself." : "");
    later(attempt(list), live.dataset.active === "yes" ? SOON : LATER);
  }
})();
