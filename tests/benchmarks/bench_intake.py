"""Time and memory of opening 5,000 series of 60 years of months from Parquet.

Run it with ``python tests/benchmarks/bench_intake.py``. Memory is the growth of the process's peak while the panel
is opened, in a process of its own.
"""

from __future__ import annotations

import multiprocessing
import resource
import sys
import tempfile
import time
from pathlib import Path

import numpy as np
import pandas as pd

PERIODS, SERIES, FACTORS = 720, 5_000, 5


def write(folder: Path) -> None:
    """Write the returns and the factors; 3 series in 100 start late."""
    rng = np.random.default_rng(1)
    dates = pd.date_range("1964-01-31", periods=PERIODS, freq="ME", name="date")
    factors = pd.DataFrame(
        rng.normal(0.004, 0.03, (PERIODS, FACTORS)), dates, [f"F{i}" for i in range(FACTORS)]
    )
    returns = factors.to_numpy() @ rng.normal(0.3, 0.4, (FACTORS, SERIES)) + rng.normal(
        0, 0.05, (PERIODS, SERIES)
    )
    returns[:120, ::33] = np.nan
    pd.DataFrame(np.clip(returns, -0.9, None), dates, [f"A{i}" for i in range(SERIES)]).to_parquet(
        folder / "returns.parquet"
    )
    factors.assign(RF=0.003 + 0.0001 * np.sin(np.arange(PERIODS) / 50)).to_parquet(folder / "factors.parquet")


def measure(folder: Path, answer: multiprocessing.Queue) -> None:
    """Open the panel once, and send what it took."""
    import pyarrow.parquet  # noqa: F401

    from soffit.intake import open_panel

    before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    start, used = time.perf_counter(), time.process_time()
    panel = open_panel(folder / "returns.parquet", folder / "factors.parquet", progress=False)
    seconds = time.perf_counter() - start, time.process_time() - used
    grown = (resource.getrusage(resource.RUSAGE_SELF).ru_maxrss - before) * (
        1 if sys.platform == "darwin" else 1024
    )
    answer.put((panel.assets.shape, seconds, grown))


def main() -> None:
    """Print the table."""
    with tempfile.TemporaryDirectory() as folder:
        # Processes of their own, since a peak of memory is passed on to a child.
        context = multiprocessing.get_context("spawn")
        writer = context.Process(target=write, args=(Path(folder),))
        writer.start()
        writer.join()
        size = (Path(folder) / "returns.parquet").stat().st_size
        answer = context.Queue()
        reader = context.Process(target=measure, args=(Path(folder), answer))
        reader.start()
        shape, seconds, grown = answer.get()
        reader.join()
    rows = [
        ("panel", f"{shape[0]:,} months x {shape[1]:,} series"),
        ("file", f"{size / 1e6:.1f} MB"),
        ("time", f"{seconds[0]:.2f} s, of which {seconds[1]:.2f} s on the processor (aim: under 3 s)"),
        ("memory", f"{grown / 1e6:.1f} MB, {grown / size:.1f} times the file (aim: under 4)"),
    ]
    print("\n".join(f"{name:<8}{value}" for name, value in rows))


if __name__ == "__main__":
    main()
