// A button that copies a text, and says so.

function render({ model, el }) {
  el.classList.add("soffit-copying");
  const button = Object.assign(document.createElement("button"), {
    type: "button",
    className: "soffit-copy jupyter-button",
  });
  el.append(button);
  const show = () => {
    button.textContent = model.get("label");
    button.title = model.get("help");
  };

  button.addEventListener("click", async () => {
    const text = model.get("text");
    let said = "Copied";
    try {
      await navigator.clipboard.writeText(text);
    } catch {
      // Without the clipboard permission the older way, through a selection.
      const place = Object.assign(document.createElement("textarea"), { value: text });
      document.body.append(place);
      place.select();
      said = document.execCommand("copy") ? "Copied" : "The browser refused";
      place.remove();
    }
    button.textContent = said;
    setTimeout(show, 1500);
  });

  for (const name of ["label", "help"]) model.on(`change:${name}`, show);
  show();
}

export default { render };
