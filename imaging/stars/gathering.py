"""The quads of the blind index gathered level by level, and handed out in the order of their shapes."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np

from imaging.stars.groups import coded
from imaging.stars.neighbours import LEVELS, Neighbours, neighbours_of

CODE_STEPS = 255  # codes are kept as 8-bit fractions: an error of 0.002, a third of the tolerance
CELL_STEPS = 5  # of a code to a cell of code space
CELLS = CODE_STEPS // CELL_STEPS + 1  # cells a side
FINE_CELLS = CELLS**2  # cells of one entry of the directory, which knows three codes of five
# Six bytes hold a quad: its number, the cell of its last two codes, and where in its cell of five codes it lies.
WITHIN_CELL = CELL_STEPS**5
# A fourth code of 1 would need more bits: no four points of a plane have five distances that are all the longest.
SHAPE_BITS, NUMBER_BITS = 23, 25
_PARTS = 64  # the quads are put in order in so many parts: bounds the memory


@dataclass(frozen=True)
class Gathered:
    """Quads as they were made: chunks of 8-bit codes (n, 5) and numbers (n,), each sorted by part of the index."""

    levels: tuple[Neighbours, ...]
    codes: list[np.ndarray]
    numbers: list[np.ndarray]
    ends: list[np.ndarray]

    def __len__(self) -> int:
        """Return the number of quads."""
        return sum(len(chunk) for chunk in self.numbers)

    def directory(self) -> np.ndarray:
        """Return where the quads of each coarse cell begin, and their number at the end (uint32)."""
        held = np.zeros(CELLS**3 + 1, dtype=np.int64)
        for codes in self.codes:
            held += np.bincount(coarse_cell(codes) + 1, minlength=len(held))
        return np.cumsum(held).astype(np.uint32)

    def in_order(self) -> Iterator[np.ndarray]:
        """Yield the packed quads (n, 3; uint16) of one part after the other, in the order of their shapes."""
        for part in range(_PARTS):
            slices = [slice(ends[part], ends[part + 1]) for ends in self.ends]
            codes = np.concatenate([chunk[here] for chunk, here in zip(self.codes, slices, strict=True)])
            numbers = np.concatenate([chunk[here] for chunk, here in zip(self.numbers, slices, strict=True)])
            shape = _fine_cell(codes) * WITHIN_CELL + _within_cell(codes)
            order = np.argsort((coarse_cell(codes) << SHAPE_BITS) + shape, kind="stable")
            packed = (numbers[order].astype("<i8") << SHAPE_BITS) + shape[order]
            yield packed.view("<u2").reshape(-1, 4)[:, :3]


def gathered(tick: Callable[[int, int], None] | None = None) -> Gathered:
    """Return the quads of the installed catalogue.

    Positions are of 2016.0; the proper motion of a century changes a quad's code by less than the tolerance for all but
    a few stars.
    """
    from imaging.stars.catalogue import vectors_of
    from planner.sky.starlist import star_list

    table = star_list()
    vectors = vectors_of(table["ra_deg"], table["dec_deg"])
    by_magnitude = np.argsort(table["v"], kind="stable")
    levels = tuple(neighbours_of(vectors, by_magnitude, level) for level in LEVELS)
    total = sum(level.numbered for level in levels)
    if total >= 1 << NUMBER_BITS:
        raise ValueError(
            f"{total} quads to be numbered, more than {NUMBER_BITS} bits hold: fewer neighbours are needed"
        )
    out = Gathered(levels, [], [], [])
    first = 0
    for level in levels:
        here = vectors[level.rows]
        for numbers in level.numbers():
            groups = coded(here, level.quads(numbers))
            codes = np.round(groups.codes * CODE_STEPS).astype(np.uint8)
            part = coarse_cell(codes) * _PARTS // CELLS**3
            order = np.argsort(part, kind="stable")
            out.codes.append(codes[order])
            out.numbers.append((first + numbers[groups.rows][order]).astype(np.uint32))
            out.ends.append(np.searchsorted(part[order], np.arange(_PARTS + 1)))
            if tick is not None and len(numbers):
                tick(first + int(numbers[-1]) + 1, total)
        first += level.numbered
    return out


def coarse_cell(codes: np.ndarray) -> np.ndarray:
    """Return the number of the cell of the first three codes (n,), of 8-bit codes (n, 5)."""
    cells = codes[:, :3].astype(np.int64) // CELL_STEPS
    return (cells[:, 0] * CELLS + cells[:, 1]) * CELLS + cells[:, 2]


def _fine_cell(codes: np.ndarray) -> np.ndarray:
    cells = codes[:, 3:].astype(np.int64) // CELL_STEPS
    return cells[:, 0] * CELLS + cells[:, 1]


def _within_cell(codes: np.ndarray) -> np.ndarray:
    place = np.zeros(len(codes), dtype=np.int64)
    for code in codes.T:
        place = place * CELL_STEPS + code % CELL_STEPS
    return place
