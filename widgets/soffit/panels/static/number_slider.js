// A native range input with a typed number beside it.
// `value` is sent at most once a frame while dragging; `dragging` turns false at release.

function render({ model, el }) {
  const get = (name) => model.get(name);
  // A comma groups thousands where whole numbers are asked for, and is a decimal point elsewhere.
  const number = (text) =>
    text.trim() === "" ? NaN : Number(text.replaceAll(",", get("decimals") ? "." : "").replace("−", "-"));
  el.classList.add("soffit-number");
  const label = document.createElement("label");
  const range = Object.assign(document.createElement("input"), { type: "range" });
  const entry = Object.assign(document.createElement("input"), { type: "text", inputMode: "decimal" });
  const unit = document.createElement("span");
  unit.className = "soffit-unit";
  range.id = `soffit-range-${Math.random().toString(36).slice(2)}`;
  label.htmlFor = range.id;
  el.append(label, range, entry, unit);

  const written = (value) => (value === null ? "" : value.toFixed(get("decimals")));
  const exact = (value) => {
    if (value === null) return "";
    const short = written(value);
    return Number(short) === value ? short : String(value);
  };

  function describe() {
    label.textContent = get("label");
    unit.textContent = get("unit");
    el.title = get("help");
    Object.assign(range, { min: get("low"), max: get("high"), step: get("step") });
    range.setAttribute("aria-label", get("label"));
    entry.setAttribute("aria-label", `${get("label")}, typed`);
    for (const input of [range, entry]) input.disabled = get("disabled");
  }

  function show() {
    const value = get("value");
    if (value !== null) range.value = value;
    const place = (Number(range.value) - range.min) / (range.max - range.min || 1);
    range.style.setProperty("--place", `${100 * place}%`);
    range.setAttribute("aria-valuetext", value === null ? "none" : `${exact(value)} ${get("unit")}`.trim());
    if (document.activeElement !== entry || !typing) entry.value = exact(value);
  }

  let frame = 0;
  let held = false; // an arrow key is down: a run of key repeats is one drag
  let typing = false;

  function send(dragging) {
    cancelAnimationFrame(frame);
    frame = 0;
    model.set("value", Number(Number(range.value).toFixed(10)));
    model.set("dragging", dragging);
    model.save_changes();
  }

  range.addEventListener("input", () => {
    if (!frame) frame = requestAnimationFrame(() => send(true));
  });
  range.addEventListener("change", () => send(held));
  range.addEventListener("keydown", (event) => {
    if (/^(Arrow|Page|Home|End)/.test(event.key)) held = true;
  });
  const release = () => {
    if (held) {
      held = false;
      send(false);
    }
  };
  range.addEventListener("keyup", release);
  range.addEventListener("blur", release);

  function commit() {
    if (!typing) return;
    typing = false;
    const value = number(entry.value);
    if (entry.value.trim() === "" && get("optional")) model.set("value", null);
    else if (Number.isNaN(value)) return show();
    else model.set("value", value);
    model.set("dragging", false);
    model.save_changes();
    show();
  }
  entry.addEventListener("input", () => (typing = true));
  entry.addEventListener("change", commit);
  entry.addEventListener("blur", commit);
  entry.addEventListener("keydown", (event) => {
    if (event.key === "Enter") commit();
    else if (event.key === "Escape") {
      typing = false;
      show();
    } else if (event.key === "ArrowUp" || event.key === "ArrowDown") {
      event.preventDefault();
      const from = number(entry.value);
      if (Number.isNaN(from)) return;
      entry.value = (from + (event.key === "ArrowUp" ? 1 : -1) * get("step")).toFixed(get("decimals"));
      typing = true;
      commit();
    }
  });
  // The front end's own shortcuts and its drag of cells must not take these keys and gestures.
  for (const input of [range, entry]) input.dataset.lmSuppressShortcuts = "true";
  for (const kind of ["keydown", "mousedown"]) el.addEventListener(kind, (event) => event.stopPropagation());

  model.on("change:value", show);
  for (const name of ["label", "help", "unit", "low", "high", "step", "decimals", "disabled"])
    model.on(`change:${name}`, () => (describe(), show()));
  describe();
  show();
  return () => cancelAnimationFrame(frame);
}

export default { render };
