// Two things the server cannot do. Results are seen only while every text on the page is the text the server has
// read: the page ends with a list of what was read, and anything typed since hides the results until it is read
// too. And work that was not downloaded is not lost without a question.
(function () {
  if (window.pkcalcReady) return;
  window.pkcalcReady = true;
  let unsaved = false;
  let asked = false;
  let newerThan = -1; // a choice was made: wait for the run that has read it
  let touched = Date.now();
  const inForm = (e) => e instanceof Element && e.closest('[class*="st-key-step"]') !== null;
  const fields = () => document.querySelectorAll(
    '[class*="st-key-step"] input[type="text"]:not([role="combobox"]), [class*="st-key-step"] textarea');
  const keyOf = (field) => {
    const holder = field.closest('[data-testid="stElementContainer"]');
    const name = holder ? [...holder.classList].find((c) => c.startsWith("st-key-")) : undefined;
    return name ? name.slice(7) : "";
  };
  const compare = () => {
    asked = false;
    const mark = document.querySelector(".pk-read");
    let same = mark !== null;
    if (mark !== null) {
      if (Number(mark.getAttribute("data-run")) <= newerThan) same = false;
      const read = JSON.parse(mark.getAttribute("data-read") || "{}");
      for (const field of fields()) {
        if ((read[keyOf(field)] || "") !== field.value) { same = false; break; }
      }
    }
    document.body.classList.toggle("pk-typing", !same);
  };
  const later = () => { if (!asked) { asked = true; requestAnimationFrame(compare); } };
  const release = () => {
    const app = document.querySelector('[data-testid="stApp"]');
    if (app && app.getAttribute("data-test-script-state") === "running") { setTimeout(release, 500); return; }
    newerThan = -1;
    compare();
  };
  const chose = () => {
    unsaved = true;
    const mark = document.querySelector(".pk-read");
    newerThan = mark === null ? -1 : Number(mark.getAttribute("data-run"));
    compare();
    setTimeout(release, 2000); // the same choice again is no change: nothing new will come
  };
  document.addEventListener("input", (event) => { if (inForm(event.target)) { unsaved = true; compare(); } }, true);
  document.addEventListener("change", (event) => {
    if (!inForm(event.target)) return;
    unsaved = true;
    if (event.target.matches('input[type="radio"], input[type="checkbox"]')) chose();
  }, true);
  document.addEventListener("click", (event) => {
    if (event.target instanceof Element && event.target.closest('[role="option"]')) chose();
  }, true);
  document.addEventListener("keydown", (event) => {
    const field = event.target;
    if (event.key === "Enter" && field instanceof Element && field.matches('[role="combobox"][aria-expanded="true"]')) chose();
  }, true);
  for (const kind of ["keydown", "pointerdown"]) document.addEventListener(kind, () => { touched = Date.now(); }, true);
  // A page left alone forgets: it loads anew, which begins a new and empty session.
  setInterval(() => {
    const mark = document.querySelector(".pk-read");
    const minutes = mark === null ? 0 : Number(mark.getAttribute("data-minutes"));
    if (minutes > 0 && Date.now() - touched > minutes * 60000) { unsaved = false; window.location.reload(); }
  }, 5000);
  new MutationObserver(later).observe(document.body, {
    childList: true, subtree: true, attributes: true, attributeFilter: ["data-read", "value"] });
  document.addEventListener("click", (event) => {
    if (event.target instanceof Element && event.target.closest(".st-key-get-case, .st-key-forget")) unsaved = false;
  }, true);
  window.addEventListener("beforeunload", (event) => { if (unsaved) event.preventDefault(); });
  later();
})();
