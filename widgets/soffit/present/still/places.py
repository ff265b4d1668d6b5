"""Where labels can stand so that none covers another: plain geometry in pixels."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

__all__ = ["Box", "Places", "around", "spread"]

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Box:
    """A rectangle with its lower left and upper right corners."""

    x0: float
    y0: float
    x1: float
    y1: float

    @classmethod
    def at(cls, x: float, y: float, width: float, height: float) -> Box:
        """Box with its lower left corner at a point."""
        return cls(x, y, x + width, y + height)

    def inside(self, other: Box) -> bool:
        """Whether it lies wholly within another."""
        return self.x0 >= other.x0 and self.y0 >= other.y0 and self.x1 <= other.x1 and self.y1 <= other.y1

    def meets(self, boxes: Floats) -> npt.NDArray[np.bool_]:
        """Which rows (x0, y0, x1, y1) of an array it overlaps."""
        hits: npt.NDArray[np.bool_] = (
            (self.x0 < boxes[:, 2])
            & (self.x1 > boxes[:, 0])
            & (self.y0 < boxes[:, 3])
            & (self.y1 > boxes[:, 1])
        )
        return hits


class Places:
    """Keeps account of the room that is taken and finds the best free place among candidates.

    Parameters
    ----------
    frame : Box
        No label leaves it.
    """

    def __init__(self, frame: Box) -> None:
        self._frame = frame
        self._taken = np.empty((0, 4))
        self._soft = np.empty((0, 4))
        self._weights = np.empty(0)

    def avoid(self, boxes: Floats, weight: float) -> None:
        """Prefer not to cover these boxes, shape (n, 4); `weight` is the cost of covering one."""
        self._soft = np.vstack([self._soft, boxes])
        self._weights = np.concatenate([self._weights, np.full(len(boxes), weight)])

    def take(self, box: Box) -> None:
        """Reserve a box whatever stands there."""
        # Labels side by side need a space between them, or they read as one.
        self._taken = np.vstack([self._taken, [box.x0 - 5, box.y0, box.x1 + 5, box.y1]])

    def settle(self, candidates: Sequence[Box]) -> int | None:
        """Choose the candidate that covers least, reserve it, and return its position.

        Earlier candidates win ties. None if every one leaves the frame or meets a reserved box.
        """
        best, least = None, np.inf
        for position, box in enumerate(candidates):
            if not box.inside(self._frame) or box.meets(self._taken).any():
                continue
            cost = float(self._weights[box.meets(self._soft)].sum()) + 0.02 * position
            if cost < least:
                best, least = position, cost
        if best is not None:
            self.take(candidates[best])
        return best


def around(x: float, y: float, width: float, height: float, gap: float) -> list[Box]:
    """Candidate boxes of a label around a point, near ones first."""
    found: list[Box] = []
    for reach in (gap, 2.5 * gap, 5 * gap, 9 * gap):
        middle_x, middle_y = x - width / 2, y - height / 2
        slant = reach * 0.7
        found += [
            Box.at(x + reach, middle_y, width, height),
            Box.at(x - reach - width, middle_y, width, height),
            Box.at(middle_x, y + reach, width, height),
            Box.at(middle_x, y - reach - height, width, height),
            Box.at(x + slant, y + slant, width, height),
            Box.at(x - slant - width, y + slant, width, height),
            Box.at(x + slant, y - slant - height, width, height),
            Box.at(x - slant - width, y - slant - height, width, height),
        ]
    return found


def spread(centres: Sequence[float], height: float, low: float, high: float) -> list[float]:
    """Move centres of equally high labels apart as little as needed, keeping their order.

    Parameters
    ----------
    centres : sequence of float
        Wished centres.
    height : float
        Height of one label.
    low, high : float
        Range in which the labels must stay; when it is too small the labels are spaced evenly over it.
    """
    n = len(centres)
    if n == 0:
        return []
    order = np.argsort(centres, kind="stable")
    room = high - low
    if n * height >= room:
        even = low + (np.arange(n) + 0.5) * room / n
        moved = np.empty(n)
        moved[order] = even
        return [float(value) for value in moved]
    wished = np.clip(np.asarray(centres, dtype=float)[order], low + height / 2, high - height / 2)
    # Pool neighbours that collide, each pool centred on the mean of its wishes (isotonic regression).
    pools: list[tuple[float, int]] = []
    for value in wished - height * np.arange(n):
        pools.append((float(value), 1))
        while len(pools) > 1 and pools[-2][0] > pools[-1][0]:
            (a, na), (b, nb) = pools[-2], pools[-1]
            pools[-2:] = [((a * na + b * nb) / (na + nb), na + nb)]
    base = np.repeat([value for value, _ in pools], [count for _, count in pools])
    base = np.clip(base, low + height / 2, high - height / 2 - height * (n - 1))
    moved = np.empty(n)
    moved[order] = base + height * np.arange(n)
    return [float(value) for value in moved]
