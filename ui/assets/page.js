// Two things the server cannot do. While a text is being typed and not yet read, the results below belong to
// other inputs, so they are hidden. And work that was not downloaded is not lost without a question.
(function () {
  if (window.pkcalcReady) return;
  window.pkcalcReady = true;
  let unsaved = false;
  const typed = (e) => e instanceof HTMLElement && e.matches('input[type="text"], textarea') && !e.matches('[role="combobox"]');
  const inForm = (e) => e instanceof HTMLElement && e.closest('[class*="st-key-step"]') !== null;
  const idle = () => {
    const app = document.querySelector('[data-testid="stApp"]');
    return !app || app.getAttribute("data-test-script-state") !== "running";
  };
  const show = () => document.body.classList.remove("pk-typing");
  let waiting = null;
  const showWhenRead = () => {
    clearInterval(waiting);
    const since = Date.now();
    waiting = setInterval(() => {
      if (Date.now() - since > 400 && idle()) { clearInterval(waiting); show(); }
    }, 100);
  };
  document.addEventListener("input", (event) => {
    if (!inForm(event.target)) return;
    unsaved = true;
    if (typed(event.target)) { clearInterval(waiting); document.body.classList.add("pk-typing"); }
  }, true);
  document.addEventListener("change", (event) => { if (inForm(event.target)) unsaved = true; }, true);
  document.addEventListener("focusout", (event) => { if (typed(event.target)) showWhenRead(); }, true);
  document.addEventListener("keydown", (event) => {
    if (event.key === "Enter" && typed(event.target)) showWhenRead();
  }, true);
  document.addEventListener("click", (event) => {
    if (event.target instanceof Element && event.target.closest(".st-key-get-case, .st-key-forget")) unsaved = false;
  }, true);
  window.addEventListener("beforeunload", (event) => { if (unsaved) event.preventDefault(); });
})();
