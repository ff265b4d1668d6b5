// Plays what the kernel wrote: for every step of the slider the sentence and where the marks stand, and for
// every asset the ceilings at which its status changes. No formula lives here.

const WORDS = ["inside", "straddles", "outside", "undefined"];
const CLASSES = WORDS.map((word) => `soffit-${word}`);
const fetchModel = (model, reference) => model.widget_manager.get_model(reference.replace("IPY_MODEL_", ""));
const floats = (view, Kind) => new Kind(view.buffer.slice(view.byteOffset, view.byteOffset + view.byteLength));

// Position of the first entry of a sorted array that is greater than the value.
function above(sorted, value) {
  let low = 0;
  let high = sorted.length;
  while (low < high) {
    const middle = (low + high) >> 1;
    if (sorted[middle] > value) high = middle;
    else low = middle + 1;
  }
  return low;
}

class Thresholds {
  constructor(model) {
    const turns = ["defined_from", "outside_below", "inside_from"].map((name) => floats(model.get(name), Float64Array));
    [this.definedFrom, this.outsideBelow, this.insideFrom] = turns;
    this.turns = turns.map((values) => {
      const order = Array.from(values.keys()).sort((i, j) => values[i] - values[j]);
      return { order, sorted: Float64Array.from(order, (i) => values[i]) };
    });
  }
  status(i, ceiling) {
    if (ceiling < this.definedFrom[i]) return 3;
    return ceiling < this.outsideBelow[i] ? 2 : ceiling < this.insideFrom[i] ? 1 : 0;
  }
  // The assets that have a turn between two ceilings.
  *between(from, to) {
    for (const { order, sorted } of this.turns) {
      const [first, last] = [above(sorted, Math.min(from, to)), above(sorted, Math.max(from, to))];
      for (let k = first; k < last; k++) yield order[k];
    }
  }
  counts(ceiling) {
    // Turns come in the order defined, no longer outside, inside: so the counts nest.
    const [defined, notOutside, inside] = this.turns.map(({ sorted }) => above(sorted, ceiling));
    return [inside, notOutside - inside, defined - notOutside, this.insideFrom.length - defined];
  }
}

// Where a moving mark stands at each step, in shares of the plot area: across from the left, up from the bottom.
class Moving {
  constructor({ kind, role, across, up }, steps) {
    this.tables = [across, up].map((table) => floats(table, Float32Array));
    this.length = Math.max(...this.tables.map((table) => table.length)) / steps;
    this.path = document.createElementNS("http://www.w3.org/2000/svg", "path");
    this.path.setAttribute("class", `soffit-moving-${kind}`);
    this.path.style.setProperty("--paint", `var(--soffit-${role})`);
  }
  move(step) {
    const points = [];
    for (let i = 0; i < this.length; i++) {
      const [u, v] = this.tables.map((table) => table[table.length > this.length ? step * this.length + i : i]);
      points.push(`${u.toFixed(5)},${(1 - v).toFixed(5)}`);
    }
    this.path.setAttribute("d", `M${points.join("L")}`);
  }
}

// One figure in one view. Points are bqplot's own; what moves is drawn in a layer of its own, so that a step of the
// slider repaints only this layer and the points whose status changes.
class PaintedFigure {
  constructor(figure, place, steps) {
    this.figure = figure;
    this.place = place;
    this.plot = figure.querySelector("svg.svg-figure > g");
    this.area = this.plot.querySelector(":scope > rect.plotarea_events");
    this.groups = this.plot.querySelector(":scope > g").children;
    this.layer = document.createElementNS("http://www.w3.org/2000/svg", "svg");
    this.layer.setAttribute("class", "soffit-moving");
    this.layer.setAttribute("viewBox", "0 0 1 1");
    this.layer.setAttribute("preserveAspectRatio", "none");
    this.moving = place.moving.map((mark) => new Moving(mark, steps));
    this.layer.append(...this.moving.map(({ path }) => path));
    figure.insertBefore(this.layer, figure.querySelector("svg.svg-figure"));
    for (const { mark } of place.moving) this.groups[mark].classList.add("soffit-replaced");
    this.nodes = place.points < 0 ? [] : [...this.groups[place.points].querySelectorAll(":scope > .object_grp")];
    this.layout = new MutationObserver(() => this.fit());
    this.layout.observe(this.area, { attributeFilter: ["width", "height"] });
    this.layout.observe(this.plot, { attributeFilter: ["transform"] });
    this.fit();
  }
  // A figure is ready when bqplot has drawn its points; a view that was drawn anew is another figure.
  static ready(figure, place) {
    const groups = figure.querySelector("svg.svg-figure > g > g")?.children ?? [];
    if (groups.length < place.marks) return false;
    if (place.moving.some(({ mark }) => !groups[mark].querySelector("path"))) return false;
    if (place.points < 0) return true;
    return groups[place.points].querySelectorAll(":scope > .object_grp > path.dot").length === place.count;
  }
  get current() {
    return this.figure.contains(this.layer) && (this.nodes.length === 0 || this.figure.contains(this.nodes[0]));
  }
  fit() {
    const [left, top] = /translate\(([-\d.e]+)[ ,]+([-\d.e]+)\)/.exec(this.plot.getAttribute("transform")).slice(1);
    Object.assign(this.layer.style, {
      left: `${left}px`,
      top: `${top}px`,
      width: `${this.area.getAttribute("width")}px`,
      height: `${this.area.getAttribute("height")}px`,
    });
  }
  close() {
    this.layout.disconnect();
    this.layer.remove();
    for (const group of this.groups) group.classList.remove("soffit-replaced");
  }
}

const stepOf = (model, ceiling) => {
  const step = Math.round((ceiling - model.get("low")) / model.get("step"));
  const onStep = Math.abs(model.get("low") + step * model.get("step") - ceiling) < 1e-9;
  return onStep && step >= 0 && step < model.get("sentences").length ? step : null;
};

// The sentence: once for the model, whatever number of views there are.
async function initialize({ model }) {
  const slider = await fetchModel(model, model.get("slider"));
  const finding = await fetchModel(model, model.get("finding"));
  const play = () => {
    const step = stepOf(model, slider.get("value"));
    // Between the steps, and beyond them, the kernel answers.
    if (step !== null) finding.set("text", model.get("sentences")[step]);
  };
  slider.on("change:value", play);
  return () => slider.off("change:value", play);
}

// Points and moving marks, in every view.
async function render({ model, el }) {
  el.style.display = "none";
  const slider = await fetchModel(model, model.get("slider"));
  let thresholds = new Thresholds(model);
  let root = null;
  const painted = new Map(); // figure element -> PaintedFigure

  function dress(node, status) {
    node.classList.remove(...CLASSES);
    node.classList.add(CLASSES[status]);
    if (!CSS.supports("d", 'path("M0,0")')) node.firstChild.setAttribute("d", model.get("shapes")[status]);
  }
  function paintFigure(element, place, ceiling) {
    let figure = painted.get(element);
    if (!figure?.current) {
      figure?.close();
      painted.delete(element);
      if (!PaintedFigure.ready(element, place)) return;
      figure = new PaintedFigure(element, place, model.get("sentences").length);
      painted.set(element, figure);
    }
    // A ceiling between the steps moves the marks as the kernel answers, in another place.
    const changed = figure.ceiling === undefined ? figure.nodes.keys() : thresholds.between(figure.ceiling, ceiling);
    if (figure.nodes.length) for (const i of changed) dress(figure.nodes[i], thresholds.status(i, ceiling));
    figure.ceiling = ceiling;
    const step = stepOf(model, ceiling);
    if (step !== null) for (const mark of figure.moving) mark.move(step);
    figure.layer.classList.toggle("soffit-between", step === null);
    for (const { mark } of place.moving) figure.groups[mark].classList.toggle("soffit-replaced", step !== null);
  }
  function paint() {
    const ceiling = slider.get("value");
    if (root === null || ceiling === null) return;
    for (const [element, figure] of painted)
      if (!root.contains(element)) {
        figure.close();
        painted.delete(element);
      }
    for (const place of model.get("figures"))
      for (const element of root.querySelectorAll(`.${place.css}`)) paintFigure(element, place, ceiling);
    thresholds.counts(ceiling).forEach((count, status) => {
      for (const place of root.querySelectorAll(`.soffit-count-${WORDS[status]}`)) {
        place.textContent = count.toLocaleString("en");
        if (status === 3) place.parentElement.hidden = count === 0;
      }
    });
  }
  function repaint() {
    for (const figure of painted.values()) figure.close();
    painted.clear();
    paint();
  }

  let frame = 0;
  const later = (what) => {
    cancelAnimationFrame(frame);
    frame = requestAnimationFrame(what);
  };
  // bqplot draws a figure bit by bit, and again when it is shown again.
  const ours = ".object_grp, .bqplot, .curve, .soffit-key";
  const drawn = (node) => node.nodeType === 1 && (node.matches(ours) || node.querySelector(ours));
  const watcher = new MutationObserver((changes) => {
    if (changes.some((change) => [...change.addedNodes].some(drawn))) later(paint);
  });
  // The view is attached to its panel only after it is rendered.
  const attach = () => {
    root = el.closest(".soffit-panel");
    if (root === null) return later(attach);
    watcher.observe(root, { childList: true, subtree: true });
    repaint();
  };
  attach();
  slider.on("change:value", paint);
  model.on("change:defined_from change:outside_below change:inside_from", () => {
    thresholds = new Thresholds(model);
    later(repaint);
  });
  model.on("change:figures", () => later(repaint));
  return () => {
    cancelAnimationFrame(frame);
    watcher.disconnect();
    slider.off("change:value", paint);
    for (const figure of painted.values()) figure.close();
  };
}

export default { initialize, render };
