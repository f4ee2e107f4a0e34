// Two things the server cannot do. While a text is being typed and not yet read, the results below belong to
// other inputs, so they are hidden. And work that was not downloaded is not lost without a question.
(function () {
  if (window.pkcalcReady) return;
  window.pkcalcReady = true;
  let unsaved = false;
  let before = null; // the text of the field in use when it was last read by the server
  let waiting = null;
  const typed = (e) => e instanceof HTMLElement && e.matches('input[type="text"], textarea') && !e.matches('[role="combobox"]');
  const inForm = (e) => e instanceof HTMLElement && e.closest('[class*="st-key-step"]') !== null;
  const running = () => {
    const app = document.querySelector('[data-testid="stApp"]');
    return app !== null && app.getAttribute("data-test-script-state") === "running";
  };
  const hide = () => { clearInterval(waiting); waiting = null; document.body.classList.add("pk-typing"); };
  const show = () => { clearInterval(waiting); waiting = null; document.body.classList.remove("pk-typing"); };
  // Results come back only when the server has read the new text: one run seen to begin, then an end of running.
  let runs = 0;
  let wasRunning = false;
  const watched = new MutationObserver(() => {
    const now = running();
    if (now && !wasRunning) runs += 1;
    wasRunning = now;
  });
  watched.observe(document.body, { attributes: true, subtree: true, attributeFilter: ["data-test-script-state"] });
  const showWhenRead = (field) => {
    if (field.value === before) { if (waiting === null) show(); return; }
    before = field.value;
    hide();
    const since = Date.now();
    const first = runs;
    let quiet = 0;
    waiting = setInterval(() => {
      quiet = running() ? 0 : quiet + 1;
      if ((runs > first && quiet >= 3) || Date.now() - since > 15000) show();
    }, 40);
  };
  document.addEventListener("focusin", (event) => { if (typed(event.target)) before = event.target.value; }, true);
  document.addEventListener("input", (event) => {
    if (!inForm(event.target)) return;
    unsaved = true;
    if (typed(event.target)) { hide(); }
  }, true);
  document.addEventListener("change", (event) => { if (inForm(event.target)) unsaved = true; }, true);
  document.addEventListener("focusout", (event) => {
    if (inForm(event.target) && typed(event.target)) showWhenRead(event.target);
  }, true);
  document.addEventListener("keydown", (event) => {
    if (event.key === "Enter" && inForm(event.target) && typed(event.target)) showWhenRead(event.target);
  }, true);
  document.addEventListener("click", (event) => {
    if (event.target instanceof Element && event.target.closest(".st-key-get-case, .st-key-forget")) unsaved = false;
  }, true);
  window.addEventListener("beforeunload", (event) => { if (unsaved) event.preventDefault(); });
})();
