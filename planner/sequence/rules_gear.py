"""Rules about what changes between frames: filters, the panels of a mosaic, and what the rig guides on."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from planner.sequence.capacity import end_utc
from planner.sequence.feasibility import Case
from planner.sequence.models import Finding
from planner.sequence.wording import duration_text


def filters_slow(case: Case) -> Iterator[Finding]:
    """Stepping through filters takes longer than the frames do."""
    rig, wish = case.plan.rig, case.setting.wish
    for passage in case.plan.passages:
        names = list(dict.fromkeys(shot.filter for shot in passage.shots))
        if passage.done or passage.visit is not None or len(names) < 2:
            continue
        step_s = sum(
            rig.filter_step_s(before, after)
            for before, after in zip(names, [*names[1:], names[0]], strict=True)
        )
        round_s = passage.shots[0].cadence_s
        asked = wish.cadence_s is not None and round_s > wish.cadence_s * 1.001
        yield Finding(
            rule="filters-slow",
            level="caution" if asked else "note",
            where=passage.name,
            sentence=f"A round through {', '.join(str(name) for name in names)} takes {round_s:g} s, of which "
            f"{step_s:g} s go into changing filters"
            + (f"; {wish.cadence_s:g} s are asked for." if asked else "."),
            cure="Fewer filters, or a rig without a wheel's wait: one filter, or a colour sensor."
            if asked
            else "Nothing to do; fewer filters give more frames.",
        )
        return


def mosaic_long(case: Case) -> Iterator[Finding]:
    """A visit takes long because every panel is shot; the target moves on meanwhile."""
    visits = [passages for passages in case.plan.visits() if passages[0].panel and not passages[0].done]
    if not visits:
        return
    rig = case.plan.rig
    longest = max(visits, key=lambda each: end_utc(each[-1]) - min(shot.start_utc for shot in each[0].shots))
    seconds = (end_utc(longest[-1]) - min(shot.start_utc for shot in longest[0].shots)).total_seconds()
    slewing_s = sum(each.slack_s or 0.0 for each in longest[:-1])
    moved = _moved_arcsec(case, seconds) / rig.scale_arcsec_px
    yield Finding(
        rule="mosaic-long",
        level="note",
        where=longest[0].name.rsplit(" ", 1)[0],
        sentence=f"{len(longest)} panels take {duration_text(seconds)} a visit, {duration_text(slewing_s)} of it "
        f"to slew and settle; the target moves {moved:.1f} pixels meanwhile.",
        cure="Nothing to do: the target's panel comes first. A shorter focal length needs fewer panels.",
    )


def _moved_arcsec(case: Case, seconds: float) -> float:
    from planner.sequence.nights import path_arcsec

    middle = case.setting.event.middle_tt_s
    return float(path_arcsec(case.setting.geometry(middle + np.array([0.0, seconds])))[-1])


def panel_out_of_reach(case: Case) -> Iterator[Finding]:
    """A panel of a mosaic lies below the horizon line or outside the mount's limits."""
    from planner.sky.places import altaz
    from planner.sky.timescale import tt_s_from_datetime

    panels = [each for each in case.plan.passages if each.panel and not each.done]
    if not panels:
        return
    place = (
        np.array([each.aim_ra_deg for each in panels], float),
        np.array([each.aim_dec_deg for each in panels], float),
    )
    tt_s = np.asarray(tt_s_from_datetime([each.shots[0].start_utc for each in panels]), float)
    altitude, azimuth = altaz(place, case.setting.observer, tt_s)
    low = (altitude < case.setting.least_altitude_deg(azimuth)) | (
        altitude > case.plan.rig.mount.max_altitude_deg
    )
    if low.any():
        first = int(np.argmin(altitude))
        yield Finding(
            rule="panel-out-of-reach",
            level="caution",
            where=panels[first].name if low.sum() == 1 else f"{int(low.sum())} panels",
            sentence=f"The middle of {panels[first].name} stands {altitude[first]:.0f} degrees up, under the horizon "
            "line or outside the mount's limits.",
            cure="Visit when the whole track is up (visit_when), or name a smaller mosaic (columns, rows).",
        )


def guide_unfit(case: Case) -> Iterator[Finding]:
    """What the rig is to guide on is not there."""
    on = case.plan.rig.guiding.on
    lost = [each for each in case.plan.passages if not each.done and each.guide is None]
    if on == "none" or not lost or case.plan.rig.mount.kind == "fixed":
        return
    guiding, reference = case.plan.rig.guiding, case.setting.family.reference
    if on != "star":
        sentence = f"The rig guides on the {on.capitalize()}, which this plan does not follow."
        cure = "Guide on a star." if reference == "stars" else f"Guide on the {reference.capitalize()}."
    elif reference == "sun":
        sentence = "The rig guides on a star, and by day there is none."
        cure = "Guide on the Sun's limb, or leave guiding off: exposures are short."
    else:
        sentence = (
            f"No star to magnitude {guiding.faintest_mag:g} stands within {guiding.reach_deg:g} degrees "
            f"of the middle in {len(lost)} of {len(case.plan.passages)} passages."
        )
        cure = "A more sensitive guide camera (faintest_mag), a wider one (reach_deg), or no guiding."
    yield Finding(
        rule="guide-unfit",
        level="caution",
        where=lost[0].name if len(lost) == 1 else f"{lost[0].name} to {lost[-1].name}",
        sentence=sentence,
        cure=cure,
    )


RULES = (filters_slow, mosaic_long, panel_out_of_reach, guide_unfit)
