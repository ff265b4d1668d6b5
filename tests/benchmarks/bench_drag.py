"""Time from a moved slider to a painted screen, in JupyterLab in a headless Chromium.

Run it by itself: ``python tests/benchmarks/bench_drag.py [sizes ...]``. It drags the ceiling with the mouse, notes
for every frame what stands on the screen, and prints for each number of assets:

- moved to painted: from an input event of the slider to the end of the first frame that shows its sentence and its
  bound (an event that a later one overtook counts until that one is painted);
- frames a second during the drag;
- settle: from the release to the end of the frame after the kernel came to rest;
- typed: from Enter on a number between the slider's steps to the kernel's sentence on the screen;
- kernel: what one event of a drag takes in the kernel.
"""

from __future__ import annotations

import sys
import time
from pathlib import Path
from typing import Any

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1] / "browser"))

from lab import Lab, Sheet, notebook

SIZES = (25, 500, 2_000, 5_000)

_STUDY = """
import numpy as np, pandas as pd
from soffit.study import Study
from soffit.panels.ceiling_panel import CeilingPanel
rng = np.random.default_rng(20240229)
dates = pd.date_range("2000-01-31", periods=240, freq="ME")
factors = rng.normal(0.004, 0.03, (240, 3))
sigma = rng.uniform(0.01, 0.06, {count})
returns = factors @ rng.normal(0.6, 0.3, (3, {count})) + sigma * rng.normal(0.08, 1.0, (240, {count}))
study = Study.open(
    pd.DataFrame(returns, dates, [f"Asset {{i:04d}}" for i in range({count})]),
    pd.DataFrame(factors, dates, ["Mkt", "SMB", "HML"]),
)
"""

_KERNEL = """
import time
widget = panel.session.control("ceiling").widget
taken = []
for value in np.round(np.arange(0.5, 2.5, 0.01), 2):
    start = time.perf_counter()
    widget.set_state({"value": float(value), "dragging": True})
    taken.append(1000 * (time.perf_counter() - start))
widget.set_state({"value": 1.0, "dragging": False})
print(float(np.median(taken)), float(np.quantile(taken, 0.95)))
"""

_WATCH = """() => {
    const root = document.querySelector('.soffit-panel');
    const range = root.querySelector('input[type=range]');
    const text = root.querySelector('.soffit-finding p');
    const line = root.querySelector('.soffit-moving path.soffit-moving-line');
    const seen = (window.__seen = { inputs: [], frames: [], release: 0, idle: 0 });
    range.addEventListener('input', (e) => seen.inputs.push([e.timeStamp, Number(range.value)]));
    window.addEventListener('pointerup', (e) => (seen.release = e.timeStamp), true);
    const kernel = window.jupyterapp.shell.currentWidget.sessionContext.session.kernel;
    const painted = new MessageChannel();
    let resting = false;
    kernel.statusChanged.connect((_, status) => (resting = status === 'idle'));
    painted.port1.onmessage = () => {
        const ceiling = /ceiling of (\\d+\\.\\d+)/.exec(text.textContent);
        seen.frames.push([performance.now(), ceiling ? Number(ceiling[1]) : -1, line.getAttribute('d')]);
        if (seen.release && resting) { seen.idle = performance.now(); resting = false; }
    };
    const frame = () => { painted.port2.postMessage(0); requestAnimationFrame(frame); };
    requestAnimationFrame(frame);
}"""


def latencies(seen: dict[str, Any]) -> list[float]:
    """Milliseconds from each input event to the frame that shows its value, or the later one that overtook it."""
    frames, inputs = seen["frames"], seen["inputs"]
    final = {ceiling: path for _, ceiling, path in frames}
    complete = [(at, ceiling) for at, ceiling, path in frames if path == final[ceiling]]
    out = []
    for position, (moved, _) in enumerate(inputs):
        due = {round(value, 2) for _, value in inputs[position:]}
        shown = [at for at, ceiling in complete if at > moved and ceiling in due]
        if shown:
            out.append(shown[0] - moved)
    return out


def measure(lab: Lab, count: int) -> str:
    """One row of the table."""
    sheet: Sheet = lab.open(notebook(_STUDY.format(count=count), "panel = CeilingPanel(study)\npanel"))
    sheet.run(timeout=300)
    sheet.page.wait_for_selector(".soffit-figure .object_grp.soffit-inside, .object_grp.soffit-outside")
    time.sleep(3.0)
    sheet.page.evaluate(_WATCH)
    handle = sheet.find(".soffit-number input[type=range]").first
    moved: list[float] = []
    settled: list[float] = []
    rates: list[float] = []
    for start, end in ((0.33, 0.75), (0.75, 0.35), (0.35, 0.7)):
        sheet.page.evaluate(
            "() => Object.assign(window.__seen, {inputs: [], frames: [], release: 0, idle: 0})"
        )
        sheet.drag(handle, start, end, steps=120, hold=True)
        time.sleep(0.3)
        sheet.page.mouse.up()
        time.sleep(2.5)
        seen = sheet.page.evaluate("() => window.__seen")
        moved += latencies(seen)
        first, last = seen["inputs"][0][0], seen["inputs"][-1][0]
        rates.append(1000 * sum(first <= at <= last for at, *_ in seen["frames"]) / (last - first))
        settled.append(seen["idle"] - seen["release"])
    typed = []
    entry = sheet.find(".soffit-number input[type=text]").first
    for value in ("1.0049", "1.6049", "0.9951"):
        entry.fill(value)
        sheet.page.evaluate("() => Object.assign(window.__seen, {frames: []})")
        began = sheet.page.evaluate("() => performance.now()")
        entry.press("Enter")
        time.sleep(1.5)
        shown = [
            at
            for at, ceiling, _ in sheet.page.evaluate("() => window.__seen.frames")
            if ceiling == round(float(value), 2)
        ]
        typed.append(shown[0] - began if shown else float("nan"))
    kernel = [float(part) for part in sheet.python(_KERNEL).split()]
    if sheet.complaints:
        print("console:", sheet.complaints[:3])
    sheet.page.close()
    return (
        f"{count:>7,}  {np.median(moved):>7.0f} ({np.quantile(moved, 0.95):.0f})  {len(moved):>6}  "
        f"{np.mean(rates):>5.0f}  {np.median(settled):>6.0f}  {np.nanmedian(typed):>6.0f}  "
        f"{kernel[0]:>6.2f} ({kernel[1]:.2f})"
    )


def main() -> None:
    """Print the table."""
    sizes = [int(size) for size in sys.argv[1:]] or list(SIZES)
    print(" assets  moved to painted  events   fps  settle   typed  kernel per event, ms (p95)")
    with Lab() as lab:
        for count in sizes:
            print(measure(lab, count), flush=True)


if __name__ == "__main__":
    main()
