// The finding: one or two sentences that can be copied, announced once they have settled.

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

  model.on("change:text", show);
  text.textContent = spoken.textContent = model.get("text");
  return () => clearTimeout(wait);
}

export default { render };
