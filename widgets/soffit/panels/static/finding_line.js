// The finding: one or two sentences that can be copied, announced once they have settled.
// It also gives the panel's figures their text alternatives.

function render({ model, el }) {
  el.classList.add("soffit-finding");
  const text = document.createElement("p");
  const spoken = document.createElement("p");
  const copy = Object.assign(document.createElement("button"), {
    type: "button",
    className: "soffit-copy jupyter-button",
    textContent: "Copy",
    title: "Copy the finding as text",
  });
  spoken.className = "soffit-spoken";
  spoken.setAttribute("aria-live", "polite");
  text.setAttribute("aria-hidden", "true"); // read through the live line, once settled
  el.append(text, copy, spoken);

  let wait = 0;
  const show = () => {
    text.textContent = model.get("text");
    clearTimeout(wait);
    wait = setTimeout(() => (spoken.textContent = model.get("text")), 400);
  };

  copy.addEventListener("click", async () => {
    try {
      await navigator.clipboard.writeText(model.get("text"));
    } catch {
      // Without the clipboard permission the text is selected, ready for the keyboard.
      getSelection().selectAllChildren(text);
      copy.textContent = "Selected: press Ctrl+C";
      setTimeout(() => (copy.textContent = "Copy"), 4000);
      return;
    }
    copy.textContent = "Copied";
    setTimeout(() => (copy.textContent = "Copy"), 1500);
  });

  let root = null;
  let frame = 0;
  const describe = () => {
    for (const [css, alt] of Object.entries(model.get("alts")))
      for (const figure of root?.querySelectorAll(`.${css} > svg.svg-figure`) ?? []) {
        figure.setAttribute("role", "img");
        figure.setAttribute("aria-label", alt);
      }
  };
  const watcher = new MutationObserver((changes) => {
    if (changes.some(({ addedNodes }) => [...addedNodes].some((node) => node.classList?.contains("bqplot")))) describe();
  });
  // The view is attached to its panel only after it is rendered.
  const attach = () => {
    root = el.closest(".soffit-panel");
    if (root === null) return (frame = requestAnimationFrame(attach));
    watcher.observe(root, { childList: true, subtree: true });
    describe();
  };
  attach();
  model.on("change:alts", describe);

  model.on("change:text", show);
  text.textContent = spoken.textContent = model.get("text");
  return () => {
    clearTimeout(wait);
    cancelAnimationFrame(frame);
    watcher.disconnect();
  };
}

export default { render };
