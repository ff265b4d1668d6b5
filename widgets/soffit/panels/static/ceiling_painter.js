// Plays what the kernel wrote: for every step of the slider the sentence and where the marks stand,
// for every asset the two ceilings at which its status changes. No formula lives here.

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

// Sentence and moving marks: once for the model, whatever number of views there are.
async function initialize({ model }) {
  const slider = await fetchModel(model, model.get("slider"));
  const finding = await fetchModel(model, model.get("finding"));
  let targets = [];
  async function load() {
    const moves = model.get("moves");
    const marks = await Promise.all(moves.map(({ mark }) => fetchModel(model, mark)));
    targets = moves.map(({ traits }, i) => ({
      mark: marks[i],
      traits: traits.map((trait) => ({ ...trait, table: floats(trait.table, Float32Array) })),
    }));
  }
  function play() {
    const ceiling = slider.get("value");
    const step = Math.round((ceiling - model.get("low")) / model.get("step"));
    const sentences = model.get("sentences");
    const onStep = Math.abs(model.get("low") + step * model.get("step") - ceiling) < 1e-9;
    if (!onStep || step < 0 || step >= sentences.length) return; // the kernel answers for these
    finding.set("text", sentences[step]);
    for (const { mark, traits } of targets) {
      const state = {};
      for (const { name, rows, table } of traits) {
        const width = table.length / sentences.length;
        const row = table.slice(step * width, (step + 1) * width);
        const length = width / rows;
        state[name] =
          rows === 1 ? row : Array.from({ length: rows }, (_, r) => row.slice(r * length, (r + 1) * length));
      }
      mark.set(state);
    }
  }
  await load();
  model.on("change:moves", load);
  slider.on("change:value", play);
  return () => slider.off("change:value", play);
}

// Points: in every view, only those whose status changes.
async function render({ model, el }) {
  el.style.display = "none";
  const slider = await fetchModel(model, model.get("slider"));
  let thresholds = new Thresholds(model);
  let root = null;
  let painted = new Map(); // figure element -> { nodes, ceiling }

  function points(figure, { mark, count }) {
    const group = figure.querySelector("svg.svg-figure > g > g")?.children[mark];
    const nodes = group ? [...group.children].filter((node) => node.classList.contains("object_grp")) : [];
    return nodes.length === count ? nodes : null;
  }
  function dress(node, status) {
    node.classList.remove(...CLASSES);
    node.classList.add(CLASSES[status]);
    if (!CSS.supports("d", 'path("M0,0")')) node.firstChild.setAttribute("d", model.get("shapes")[status]);
  }
  function paint() {
    const ceiling = slider.get("value");
    if (root === null || ceiling === null) return;
    for (const place of model.get("figures")) {
      for (const figure of root.querySelectorAll(`.${place.css}`)) {
        let known = painted.get(figure);
        if (!known || !known.nodes[0]?.isConnected || known.nodes.length !== place.count) {
          const nodes = points(figure, place);
          if (!nodes) continue;
          nodes.forEach((node, i) => dress(node, thresholds.status(i, ceiling)));
          painted.set(figure, { nodes, ceiling });
          continue;
        }
        for (const i of thresholds.between(known.ceiling, ceiling))
          dress(known.nodes[i], thresholds.status(i, ceiling));
        known.ceiling = ceiling;
      }
    }
    thresholds.counts(ceiling).forEach((count, status) => {
      for (const place of root.querySelectorAll(`.soffit-count-${WORDS[status]}`)) {
        place.textContent = count.toLocaleString("en");
        if (status === 3) place.parentElement.hidden = count === 0;
      }
    });
  }
  function repaint() {
    painted = new Map();
    paint();
  }

  let frame = 0;
  const later = () => {
    cancelAnimationFrame(frame);
    frame = requestAnimationFrame(repaint);
  };
  const ours = ".object_grp, .bqplot, .soffit-key";
  const drawn = (node) => node.nodeType === 1 && (node.matches(ours) || node.querySelector(ours));
  const watcher = new MutationObserver((changes) => {
    if (changes.some((change) => [...change.addedNodes].some(drawn))) later();
  });
  // The view is attached to its panel only after it is rendered.
  const attach = () => {
    root = el.closest(".soffit-panel");
    if (root === null) return (frame = requestAnimationFrame(attach));
    watcher.observe(root, { childList: true, subtree: true });
    repaint();
  };
  attach();
  slider.on("change:value", paint);
  model.on("change:defined_from change:outside_below change:inside_from", () => {
    thresholds = new Thresholds(model);
    later();
  });
  model.on("change:figures", later);
  return () => {
    cancelAnimationFrame(frame);
    watcher.disconnect();
    slider.off("change:value", paint);
  };
}

export default { initialize, render };
