"""What-if: the same brief with another rig, site or exposure, side by side in the terms that matter."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np

from planner.errors import DocumentError, InputError
from planner.sequence import radiometry, strictyaml
from planner.sequence.documents import load_rig, load_site
from planner.sequence.models import Brief, Plan, Rig, Wish
from planner.sequence.wording import duration_text, exposure_range_text


@dataclass(frozen=True)
class Row:
    """One term of a comparison: a value in words for each plan."""

    label: str
    values: tuple[str, ...]


@dataclass(frozen=True)
class Comparison:
    """Plans side by side; `reasons` says why a column is empty."""

    names: tuple[str, ...]
    rows: tuple[Row, ...]
    reasons: tuple[str, ...] = ()

    def as_dict(self) -> dict[str, dict[str, str]]:
        """Return `{name: {label: value}}`."""
        return {
            name: {row.label: row.values[column] for row in self.rows}
            for column, name in enumerate(self.names)
        }


def variants(
    brief: Brief, paths: tuple[Path, ...] = (), exposures_s: tuple[float, ...] = ()
) -> dict[str, Brief]:
    """Return the brief and its variants by name: other rigs or sites (files), other exposures."""
    alone = brief.model_copy(update={"other_rigs": []})
    assert isinstance(alone.rig, Rig)
    found = {alone.rig.name: alone}
    for path in paths:
        data = strictyaml.read(path).data
        if isinstance(data, dict) and "sensor" in data:
            rig = load_rig(path)
            found[_fresh(rig.name, found)] = alone.model_copy(
                update={"rig": rig, "wish": _wish_of(alone, rig)}
            )
        elif isinstance(data, dict) and "latitude_deg" in data:
            site = load_site(path)
            found[_fresh(site.name, found)] = alone.model_copy(update={"site": site})
        else:
            raise DocumentError(
                path, 1, "(document)", "neither sensor nor latitude_deg", "a rig or a site is needed"
            )
    for exposure_s in exposures_s:
        if exposure_s <= 0:
            raise InputError(f"--exposure: found {exposure_s:g}; more than 0 seconds is needed")
        wish = alone.wish.model_copy(update={"exposure_s": exposure_s})
        found[_fresh(f"{exposure_s:g} s", found)] = alone.model_copy(update={"wish": wish})
    return found


def _wish_of(brief: Brief, rig: Rig) -> Wish:
    """Return the brief's wish as far as another rig has the filters for it."""
    known = {each.name for each in rig.filters}
    wish = brief.wish
    return wish.model_copy(
        update={
            "filters": [name for name in wish.filters if name in known],
            "filter": wish.filter if wish.filter in known else None,
        }
    )


def _fresh(name: str, taken: dict[str, Brief]) -> str:
    return name if name not in taken else f"{name} ({len(taken) + 1})"


def compare(briefs: dict[str, Brief]) -> Comparison:
    """Return the comparison of briefs; a brief that cannot be planned says why in its column."""
    from planner.sequence.builder import build_plan

    columns: dict[str, dict[str, str]] = {}
    reasons: list[str] = []
    for name, brief in briefs.items():
        try:
            columns[name] = terms(build_plan(brief))
        except InputError as wrong:
            columns[name] = {"frames": "none"}
            reasons.append(f"{name}: {wrong}")
    labels = dict.fromkeys(label for column in columns.values() for label in column)
    rows = tuple(Row(label, tuple(column.get(label, "-") for column in columns.values())) for label in labels)
    return Comparison(tuple(columns), rows, tuple(reasons))


def terms(plan: Plan) -> dict[str, str]:
    """Return what matters of a plan, in words."""
    rig = plan.rig
    shots = [shot for passage in plan.passages for shot in passage.shots]
    first = min(shot.start_utc for shot in shots)
    last = max(shot.start_utc for shot in shots)
    wide, high = (
        pixels * rig.scale_arcsec_px / 3600 for pixels in (rig.sensor.width_px, rig.sensor.height_px)
    )
    found = {
        "frames": str(plan.frames_total),
        "from first to last": duration_text((last - first).total_seconds()),
        "scale": f'{rig.scale_arcsec_px:.2f}"/px',
        "field": f"{wide:.2f} x {high:.2f} deg",
        "exposure": exposure_range_text([shot.exposure_s for shot in shots]),
        "storage": f"{plan.storage_gb:.1f} GB of {rig.storage_gb:g}",
    }
    peaks = [shot for shot in shots if shot.peak_e]
    if peaks:
        fractions = [shot.peak_e / radiometry.saturation_e(rig, shot.gain) for shot in peaks]  # type: ignore[operator]
        found["peak over saturation"] = f"{100 * float(np.median(fractions)):.0f} %"
        noise = [
            shot.peak_e / np.sqrt(shot.peak_e + radiometry.at_gain(rig, shot.gain).read_noise_e ** 2)  # type: ignore[operator]
            for shot in peaks
        ]
        found["signal-to-noise of the brightest pixel"] = f"{float(np.median(noise)):.0f}"
    trails = [shot.trail_px for shot in shots if shot.trail_px is not None]
    if trails:
        found["longest trail"] = f"{max(trails):.2g} px"
    for name, count in frames_in_contacts(plan).items():
        found[f"frames within 1 sigma of {name.replace('_', ' ')}"] = str(count)
    stars = [passage.stars_expected for passage in plan.passages if passage.stars_expected is not None]
    if stars:
        found["stars for a solution"] = f"{min(stars)} to {max(stars)}"
    for level in ("error", "caution"):
        rules = [finding.rule for finding in plan.findings if finding.level == level]
        found[f"{level}s"] = ", ".join(dict.fromkeys(rules)) or "none"
    return found


def frames_in_contacts(plan: Plan) -> dict[str, int]:
    """Return how many frames begin within the 1-sigma (prediction and clock) of each contact."""
    from planner.sequence.frametimes import frame_starts
    from planner.sequence.windows import is_contact
    from planner.sky.timescale import tt_s_from_iso

    if any(passage.visit is not None for passage in plan.passages):
        return {}
    _, _, start, _ = frame_starts(plan)
    found = {}
    for instant in plan.circumstances["instants"]:
        if not is_contact(instant["name"]):
            continue
        sigma = float(np.hypot(instant["sigma_s"], plan.rig.clock.sigma_s))
        found[instant["name"]] = int((np.abs(start - tt_s_from_iso(instant["utc"])) <= sigma).sum())
    return found
