// Two things the server cannot do. Results are seen only while every text on the page is the text the server has
// read: the page ends with a list of what was read, and anything typed since hides the results until it is read
// too. And work that was not downloaded is not lost without a question.
(function () {
  if (window.pkcalcReady) return;
  window.pkcalcReady = true;
  let unsaved = false;
  let asked = false;
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
      const read = JSON.parse(mark.getAttribute("data-read") || "{}");
      for (const field of fields()) {
        if ((read[keyOf(field)] || "") !== field.value) { same = false; break; }
      }
    }
    document.body.classList.toggle("pk-typing", !same);
  };
  const later = () => { if (!asked) { asked = true; requestAnimationFrame(compare); } };
  document.addEventListener("input", (event) => { if (inForm(event.target)) { unsaved = true; compare(); } }, true);
  document.addEventListener("change", (event) => { if (inForm(event.target)) unsaved = true; }, true);
  new MutationObserver(later).observe(document.body, {
    childList: true, subtree: true, attributes: true, attributeFilter: ["data-read", "value"] });
  document.addEventListener("click", (event) => {
    if (event.target instanceof Element && event.target.closest(".st-key-get-case, .st-key-forget")) unsaved = false;
  }, true);
  window.addEventListener("beforeunload", (event) => { if (unsaved) event.preventDefault(); });
  later();
})();
