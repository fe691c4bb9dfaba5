"""What a run sheet says, before it is laid out: contact times, passages, things to do, findings, cautions."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import datetime

from planner.sequence.outlook import Outlook
from planner.sequence.windows import is_contact
from planner.sequence.wording import duration_text, exposure_range_text, local_text, nearest_second


@dataclass(frozen=True)
class SheetRow:
    """One line of a table; `strong` for what must not be missed."""

    cells: tuple[str, ...]
    strong: bool = False


@dataclass(frozen=True)
class Sheet:
    """The content of a run sheet."""

    title: str
    subtitle: str
    facts: tuple[str, ...]
    instants: tuple[SheetRow, ...]
    passages: tuple[SheetRow, ...]
    steps: tuple[SheetRow, ...]
    calibration: tuple[str, ...]
    findings: tuple[str, ...]
    cautions: tuple[str, ...]
    assumptions: tuple[str, ...]
    foot: str


INSTANT_HEAD = ("instant", "UTC", "local", "±", "PA", "alt", "az", "")
PASSAGE_HEAD = ("passage", "from UTC", "local", "frames", "every", "exposure", "gain", "filter", "guide on")
STEP_HEAD = ("", "by UTC", "local", "do")


def sheet_of(outlook: Outlook) -> Sheet:
    """Return the run sheet of a plan."""
    plan = outlook.plan
    zone = plan.site.timezone
    rig = plan.rig
    first, last = outlook.first_utc, outlook.last_utc
    facts = (
        f"{plan.site.name}: {_latitude(plan.site.latitude_deg)}, {_longitude(plan.site.longitude_deg)}, "
        f"{plan.site.height_m:.0f} m",
        f'{rig.name}: {rig.scale_arcsec_px:.2f}"/px, camera angle {rig.camera_angle_deg:g} deg'
        + (", mirrored" if rig.mirrored else ""),
        f"{plan.frames_total} frames in {duration_text((last - first).total_seconds())}, {plan.storage_gb:.1f} GB "
        f"of {rig.storage_gb:g}; clock: {rig.clock.source}, {rig.clock.sigma_s:g} s",
    )
    return Sheet(
        title=plan.title,
        subtitle=f"{first:%Y-%m-%d}"
        if first.date() == last.date()
        else f"{first:%Y-%m-%d} to {last:%Y-%m-%d}",
        facts=facts,
        instants=tuple(_instant_row(each, zone) for each in plan.circumstances["instants"]),
        passages=tuple(_passage_row(passage, zone, outlook.campaign) for passage in plan.passages),
        steps=_step_rows(outlook),
        calibration=tuple(
            f"{each.count} {each.kind}"
            + (f", filter {each.filter}" if each.filter else "")
            + (f", {each.exposure_s:g} s" if each.exposure_s else "")
            + f": {each.text}"
            for each in plan.calibration
        ),
        findings=tuple(
            f"{each.level.upper() if each.level == 'error' else each.level}, {each.where}: {each.sentence} {each.cure}"
            for each in plan.findings
        ),
        cautions=tuple(plan.cautions),
        assumptions=tuple(plan.assumptions),
        foot=f"plan of {plan.provenance.get('syzygraph', 'syzygraph')}, {plan.provenance.get('ephemeris', '')}; "
        f"times are UTC and {zone}; PA from true north through east",
    )


def _instant_row(each: dict, zone: str) -> SheetRow:  # type: ignore[type-arg]
    moment = nearest_second(datetime.fromisoformat(each["utc"]))
    sigma = float(each["sigma_s"])
    precise = sigma < 30
    shown = f"{moment:%m-%d %H:%M:%S}" if precise else f"{moment:%m-%d %H:%M}"

    def degrees(key: str) -> str:
        return "" if each[key] is None else f"{each[key]:.0f}°"

    return SheetRow(
        (
            each["name"].replace("_", " "),
            shown,
            local_text(moment, zone, seconds=precise),
            f"{sigma:.2g} s" if sigma < 99.5 else duration_text(sigma),
            degrees("position_angle_deg"),
            degrees("altitude_deg"),
            degrees("azimuth_deg"),
            each["limited_by"] or "",
        ),
        strong=is_contact(each["name"]),
    )


def _passage_row(passage, zone: str, campaign: bool) -> SheetRow:  # type: ignore[no-untyped-def]
    first = min(shot.start_utc for shot in passage.shots)
    shown = f"{first:%Y-%m-%d %H:%M}" if campaign else f"{first:%H:%M:%S}"
    gains = sorted({shot.gain for shot in passage.shots})
    filters = list(dict.fromkeys(shot.filter or "none" for shot in passage.shots))
    name = passage.name + (" (flipped)" if passage.flipped else "") + (" (taken)" if passage.done else "")
    return SheetRow(
        (
            name,
            shown,
            local_text(first, zone, seconds=not campaign),
            str(sum(shot.count for shot in passage.shots)),
            f"{passage.shots[0].cadence_s:g} s",
            exposure_range_text([shot.exposure_s for shot in passage.shots]),
            "/".join(f"{gain:g}" for gain in gains),
            "/".join(filters),
            passage.guide or "",
        ),
        strong=passage.shots[0].cadence_s < 5 and not campaign,
    )


def _step_rows(outlook: Outlook) -> tuple[SheetRow, ...]:
    """Return the checklist: the steps of a session; of a campaign those of one visit, counted from its first frame."""
    plan = outlook.plan
    zone = plan.site.timezone
    if not outlook.campaign:
        return tuple(
            SheetRow(
                ("☐", f"{step.start_utc:%H:%M:%S}", local_text(step.start_utc, zone), step.text),
                strong=step.kind in ("solar-filter", "flip", "take-down"),
            )
            for step in sorted(plan.steps, key=lambda step: step.start_utc)
        )
    waiting = [passage for passage in plan.passages if not passage.done]
    if not waiting:
        return ()
    first = min(shot.start_utc for shot in waiting[0].shots)
    before = [step for step in plan.steps if step.start_utc < first]
    rows = [
        SheetRow(
            (
                "☐",
                f"{(first - step.start_utc).total_seconds() / 60:.0f} min before",
                "",
                step.text.replace(f"guide on {waiting[0].guide}", "guide on what is named for the visit"),
            )
        )
        for step in before
    ]
    return (*rows, SheetRow(("☐", "afterwards", "", "cover the optics; calibration frames; copy the data")))


def _latitude(degrees: float) -> str:
    return f"{abs(degrees):.4f}° {'N' if degrees >= 0 else 'S'}"


def _longitude(degrees: float) -> str:
    degrees = (degrees + 180) % 360 - 180
    return f"{abs(degrees):.4f}° {'E' if degrees >= 0 else 'W'}"
