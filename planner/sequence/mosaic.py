"""A mosaic: panels in a grid, the camera's angle held, that show the whole track in one picture at each visit."""

from __future__ import annotations

from dataclasses import dataclass
from math import ceil

import numpy as np

from planner.errors import InputError
from planner.sequence.framing import MARGIN, Field, inside
from planner.sequence.models import Grid

_MOST_PANELS = 60
_LETTERS = "ABCDEFGHIJKLMNOPQRSTUVWXYZ"


@dataclass(frozen=True)
class Panels:
    """The panels of a mosaic, row by row from the top left as the frame looks; arrays of shape (n,)."""

    names: tuple[str, ...]
    ra_deg: np.ndarray
    dec_deg: np.ndarray

    def __len__(self) -> int:
        """Give the number of panels."""
        return len(self.names)

    def holding(self, field: Field, ra_deg: float, dec_deg: float) -> int:
        """Return the panel in whose frame a place lies furthest from the edges."""
        right, up = self._offsets(field, ra_deg, dec_deg)
        return int(
            np.argmin(np.fmax(np.abs(right) / field.half_width_arcsec, np.abs(up) / field.half_height_arcsec))
        )

    def holds(self, field: Field, ra_deg: float, dec_deg: float) -> np.ndarray:
        """Return which panels have a place in their frame, (n,) of bool."""
        return inside(field, self.ra_deg, self.dec_deg, np.array([ra_deg]), np.array([dec_deg]))

    def order_from(self, first: int) -> tuple[np.ndarray, np.ndarray]:
        """Return the panels in the order in which they are shot, and the degrees slewed before each.

        It begins with `first`, which is the target's, and goes on to the nearest panel left, row-wise where two are
        as near.
        """
        from planner.sky.places import separation_arcsec, unit_vector

        place = unit_vector(self.ra_deg, self.dec_deg)
        apart = separation_arcsec(place[:, :, None], place[:, None, :]) / 3600
        left = [each for each in range(len(self)) if each != first]
        order, slewed = [first], [0.0]
        while left:
            near = min(left, key=lambda each: (round(float(apart[order[-1], each]), 2), each))
            slewed.append(float(apart[order[-1], near]))
            order.append(near)
            left.remove(near)
        return np.array(order), np.array(slewed)

    def _offsets(self, field: Field, ra_deg: float, dec_deg: float) -> tuple[np.ndarray, np.ndarray]:
        from planner.sky.places import offsets_arcsec

        place = np.array([ra_deg]), np.array([dec_deg])
        right, up = field.along(*offsets_arcsec(self.ra_deg, self.dec_deg, *place))
        # a panel from which the place lies beyond the tangent plane holds it least of all
        return np.nan_to_num(right, nan=np.inf), np.nan_to_num(up, nan=np.inf)


def panels_over(
    field: Field, ra_deg: np.ndarray, dec_deg: np.ndarray, wanted: Grid | None, overlap: float
) -> Panels:
    """Return the panels over a track: as many as it needs with its margin, or the grid wanted about its middle.

    Meridians converge, so panels far apart are turned against each other: where that would leave a gap between them,
    they are moved closer. Raises InputError when that takes too many.
    """
    from planner.sky.places import offsets_arcsec, radec_deg, radec_from_offsets, unit_vector

    middle = unit_vector(ra_deg, dec_deg).mean(axis=1, keepdims=True)
    ra0, dec0 = (float(angle[0]) for angle in radec_deg(middle))
    right, up = field.along(*offsets_arcsec(ra0, dec0, ra_deg, dec_deg))
    if not np.isfinite(right).all():
        raise InputError("wish.mosaic: the track spans more than half the sky; let the pointing follow it")
    wide, high = 2 * field.half_width_arcsec, 2 * field.half_height_arcsec
    middle_x, middle_y = (right.min() + right.max()) / 2, (up.min() + up.max()) / 2
    while True:
        if wanted is not None:
            columns, rows = wanted.columns, wanted.rows
        else:
            columns = _count(np.ptp(right), wide, overlap)
            rows = _count(np.ptp(up), high, overlap)
        if columns > len(_LETTERS) or columns * rows > _MOST_PANELS:
            raise InputError(
                f"wish.mosaic: found {columns} x {rows} panels needed; at most {_MOST_PANELS} are allowed: "
                "take a shorter focal length, or let the pointing follow the track"
            )
        step_x, step_y = wide * (1 - overlap), high * (1 - overlap)
        x = middle_x + (np.arange(columns) - (columns - 1) / 2) * step_x
        y = middle_y - (np.arange(rows) - (rows - 1) / 2) * step_y
        grid_x, grid_y = (each.ravel() for each in np.meshgrid(x, y))
        ra, dec = radec_from_offsets(ra0, dec0, *field.on_sky(grid_x, grid_y))
        names = tuple(f"{_LETTERS[column]}{row + 1}" for row in range(rows) for column in range(columns))
        panels = Panels(names, np.asarray(ra), np.asarray(dec))
        if _without_gaps(field, panels, (ra0, dec0), grid_x, grid_y) or overlap > 0.6:
            return panels
        overlap += 0.04


def _count(length: float, side: float, overlap: float) -> int:
    """Return how many panels a length needs, a margin of the outer ones kept clear at both ends."""
    step = side * (1 - overlap)
    return max(1, ceil((length + 2 * MARGIN * side - side) / step - 1e-9) + 1)


def _without_gaps(
    field: Field, panels: Panels, origin_deg: tuple[float, float], grid_x: np.ndarray, grid_y: np.ndarray
) -> bool:
    """Return whether the area between the panels' middles is seen by at least one of them everywhere."""
    from planner.sky.places import radec_from_offsets

    x = np.linspace(grid_x.min(), grid_x.max(), 41)
    y = np.linspace(grid_y.min(), grid_y.max(), 41)
    ra, dec = radec_from_offsets(*origin_deg, *field.on_sky(*(each.ravel() for each in np.meshgrid(x, y))))
    seen = inside(field, panels.ra_deg[:, None], panels.dec_deg[:, None], ra, dec)
    return bool(seen.any(axis=0).all())
