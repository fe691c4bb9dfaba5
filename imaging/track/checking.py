"""A check from frames to result: every frame is measured or set aside, then all are understood together."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from imaging.track.assemble import rows_of, sightings_of
from imaging.track.contacts import time_contacts
from imaging.track.displaced import displaced_site
from imaging.track.findings import Diagnosis, Finding, Question, diagnose, explained_limit_arcsec
from imaging.track.measure import Measurer
from imaging.track.measurement import AS_PREDICTED, LIGHT_ONLY, Measurement
from imaging.track.nominal import Promise
from imaging.track.path import PredictedPath
from imaging.track.refinements import camera_findings, clock_findings, frame_findings, majority_camera
from imaging.track.result import CheckResult, SetAside, proper
from imaging.track.sightings import Sightings
from imaging.track.startimes import time_star
from planner.errors import FrameSetAside, InputError, NoSolutionError
from planner.sequence.models import Plan
from planner.sky.starlist import deeper_catalogue

if TYPE_CHECKING:
    from imaging.frames.calibrating import Calibration
    from imaging.stars.lens import LearnedLens

Outcome = Measurement | SetAside
# What fitted radii of a frame may all be off by: spread between published solar radii is 0.3" (see
# planner/events/transit.py); the Moon's limb is rough by 2 km (1") locally, 0.2" in the mean of a limb.
LIMB_SIGMA_ARCSEC = {"sun": 0.3, "moon": 0.3}
# What the centre of a fitted disc may be off by in all frames alike. The Moon's centre of figure is not its
# centre of mass, and a lit limb alone leaves 0.1-0.2" (docs: pitfalls of discs); the Sun's whole limb leaves nothing.
CENTER_SIGMA_ARCSEC = {"sun": 0.0, "moon": 0.2, "stars": 0.0}
STRAY_SHARE = 0.4


@dataclass(frozen=True)
class CheckOptions:
    """How frames are read: `zone` of stamps without one, `pictures` keeps a cut-out a frame.

    `calibration`: what is taken off each frame first. `catalogue`: a deeper star catalogue of the user's.
    `file_time`: fall back on the modification time of a file that tells no time. `lens`: learned of the rig.
    """

    zone: str | None = None
    pictures: bool = True
    jobs: int = 1
    calibration: Calibration | None = None
    catalogue: Path | None = None
    file_time: bool = False
    lens: LearnedLens | None = None


def frame_files(folder: Path) -> list[Path]:
    """Return the files of a folder that may be frames, in name order; raises InputError when there is none."""
    if not folder.is_dir():
        raise InputError(f"{folder}: is not a folder of frames")
    files = sorted(path for path in folder.iterdir() if path.is_file() and not path.name.startswith("."))
    if not files:
        raise InputError(f"{folder}: holds no files")
    return files


def measure_file(measurer: Measurer, path: Path, options: CheckOptions) -> list[Outcome]:
    """Return what each frame of one file gave, or why it was set aside; never raises for a bad frame."""
    from imaging.frames.reading import read_frames

    outcomes: list[Outcome] = []
    try:
        with deeper_catalogue(options.catalogue):
            for frame in read_frames(
                path, options.zone, file_time=options.file_time, calibration=options.calibration
            ):
                name = path.name if frame.frame_index == 0 else f"{path.name}[{frame.frame_index}]"
                if frame.time is None:
                    timeless = SetAside(name, frame.time_missing or "tells no time")
                    before = outcomes[-1] if outcomes else None
                    if not (isinstance(before, SetAside) and before.reason == timeless.reason):
                        outcomes.append(timeless)  # once for all planes of a cube
                    continue
                outcomes.append(measurer.measure(frame, pictures=options.pictures))
    except FrameSetAside as aside:
        outcomes.append(SetAside(path.name, aside.reason))
    return outcomes


def measure_files(
    plan: Plan, files: Sequence[Path], options: CheckOptions, tick: Callable[[int, int], None] | None = None
) -> Iterator[Outcome]:
    """Yield what every frame gave, in the order of the files; one frame is in memory a process."""
    if options.jobs <= 1 or len(files) < 8:
        measurer = Measurer(Promise(plan), options.lens)
        for count, path in enumerate(files, 1):
            yield from measure_file(measurer, path, options)
            if tick:
                tick(count, len(files))
        return
    from concurrent.futures import ProcessPoolExecutor

    with ProcessPoolExecutor(options.jobs, initializer=_start_worker, initargs=(plan, options)) as pool:
        # neighbours go to one worker, so that each solution starts from the one before
        chunk = int(np.clip(len(files) // (4 * options.jobs), 1, 16))
        for count, outcomes in enumerate(pool.map(_in_worker, files, chunksize=chunk), 1):
            yield from outcomes
            if tick:
                tick(count, len(files))


_worker: tuple[Measurer, CheckOptions] | None = None


def _start_worker(plan: Plan, options: CheckOptions) -> None:
    global _worker
    _worker = Measurer(Promise(plan), options.lens), options


def _in_worker(path: Path) -> list[Outcome]:
    assert _worker is not None
    return measure_file(_worker[0], path, _worker[1])


def check_frames(
    plan: Plan,
    plan_name: str,
    files: Sequence[Path],
    options: CheckOptions = CheckOptions(),
    tick: Callable[[int, int], None] | None = None,
) -> tuple[CheckResult, list[Measurement]]:
    """Measure files and understand them together; see `understand`."""
    options = with_hot_pixels(options, files)
    result, measurements = understand(plan, plan_name, measure_files(plan, files, options, tick))
    return replace(result, provenance={**result.provenance, **told(options, measurements)}), measurements


def with_hot_pixels(options: CheckOptions, files: Sequence[Path]) -> CheckOptions:
    """Return options whose calibration mends the pixels that a few of the frames themselves show to be hot."""
    from imaging.frames.calibrating import Calibration
    from imaging.frames.hotpixels import hot_pixels

    hot = hot_pixels(files)
    if hot is None:
        return options
    return replace(options, calibration=replace(options.calibration or Calibration(), hot=hot))


def told(options: CheckOptions, measurements: Sequence[Measurement] = ()) -> dict[str, str]:
    """Return what the header of a result says of how its frames were prepared and solved."""
    said = options.calibration.provenance() if options.calibration is not None else {}
    if options.catalogue is not None:
        said["catalogue"] = str(options.catalogue)
    plates = [m.stars for m in measurements if m.stars is not None]
    if options.lens is not None and plates:
        held = sum(plate.by_lens for plate in plates)
        said["lens"] = f"learned from {options.lens.frames} frames, held in {held} of {len(plates)} solutions"
    return said


def understand(
    plan: Plan, plan_name: str, outcomes: Iterable[Outcome], promise: Promise | None = None
) -> tuple[CheckResult, list[Measurement]]:
    """Return the result of a check, and the measurements in the order of its rows (by time).

    Nothing of the frames is read again: this may be called after each new frame.
    """
    outcomes = list(outcomes)
    aside = [outcome for outcome in outcomes if isinstance(outcome, SetAside)]
    measurements = [outcome for outcome in outcomes if isinstance(outcome, Measurement)]
    measurements, doubles = _without_doubles(measurements)
    aside += doubles
    measurements, others = _of_one_camera(measurements)
    aside += others
    measurements = _without_lone_strays(_without_faint_strays(measurements))
    findings = frame_findings(measurements, plan)
    measurements.sort(key=lambda m: m.time.middle_tt_s)
    promise = promise or Promise(plan)
    geometry = promise.path.geometry(np.array([promise.middle_tt_s]))
    used = _one_kind(measurements, geometry.reference)
    sightings, diagnosis, question = None, None, None
    if used.size:
        chosen = [measurements[index] for index in used]
        sightings = sightings_of(chosen, promise.path, LIMB_SIGMA_ARCSEC.get(geometry.reference, 0.0))
        question = question_of(promise, geometry.target)
        diagnosis, problem = _diagnosed(sightings, question)
        if diagnosis is not None and not diagnosis.explained:
            diagnosis = _from_another_site(diagnosis, promise, question)
        findings += [problem] if problem else list(diagnosis.findings) if diagnosis else []
    star = None
    if promise.times_a_star:
        star, told = time_star(measurements, promise, proper(geometry.target))
        findings += told
        if star is not None and star.timings:
            measurements = [_light_only(m) for m in measurements]
    rows = rows_of(measurements, used, promise.path, sightings, diagnosis)
    result = CheckResult(
        title=plan.title,
        family=plan.event.family,
        target=geometry.target,
        reference=geometry.reference,
        plan_name=plan_name,
        rows=tuple(rows),
        times_tt_s=np.array([m.time.middle_tt_s for m in measurements]),
        set_aside=tuple(aside),
        diagnosis=diagnosis,
        findings=tuple(findings),
        contacts=star.timings if star is not None else (),
        star=star,
        line=_line(promise, measurements),
        provenance=_provenance(plan),
    )
    if diagnosis is not None and question is not None:
        result = _with_fit(result, plan, promise, question, diagnosis, [measurements[i] for i in used])
    return result, measurements


def _light_only(m: Measurement) -> Measurement:
    """Return a measurement that says, where it has no place, that it serves for the star's light all the same."""
    if m.measured or m.star is None or AS_PREDICTED in m.reason:
        return m
    return replace(m, reason=LIGHT_ONLY + m.reason)


def _one_kind(measurements: Sequence[Measurement], reference: str) -> np.ndarray:
    """Return the indices of measured frames, all against the family's reference."""
    wanted = [m.measured and (m.stars is not None) == (reference == "stars") for m in measurements]
    return np.flatnonzero(wanted)


def _without_doubles(measurements: list[Measurement]) -> tuple[list[Measurement], list[SetAside]]:
    """Return the measurements without copies of one frame (same pixels), and what was taken out."""
    seen: dict[str, str] = {}
    kept, aside = [], []
    for m in measurements:
        if m.digest and m.digest in seen:
            aside.append(SetAside(m.file, f"has the same pixels as {seen[m.digest]}"))
            continue
        seen[m.digest] = m.file
        kept.append(m)
    return kept, aside


def _of_one_camera(measurements: list[Measurement]) -> tuple[list[Measurement], list[SetAside]]:
    """Return the frames of the camera that took most of them; those of another one need a plan of their own."""
    most = majority_camera(measurements)
    kept, aside = [], []
    for m in measurements:
        if (m.camera, m.shape) == most:
            kept.append(m)
            continue
        kind = f"{m.camera or 'an unnamed camera'}, {m.shape[1]} x {m.shape[0]} px"
        aside.append(SetAside(m.file, f"is of another camera than most frames ({kind})"))
    return kept, aside


def _without_faint_strays(measurements: Sequence[Measurement]) -> list[Measurement]:
    """Return the measurements, those unmeasured that took a point fainter than the brightest stray for the target.

    Where the target is hidden, a star may be the brightest point; the target itself is equally bright in all frames.
    """
    rates = [m.stray_rate_adu_s for m in measurements if m.measured and np.isfinite(m.stray_rate_adu_s)]
    if not rates:
        return list(measurements)
    least = STRAY_SHARE * max(rates)
    reason = "only a point fainter than the target, elsewhere"
    return [
        replace(m, x_px=float("nan"), reason=reason) if m.measured and m.stray_rate_adu_s < least else m
        for m in measurements
    ]


def _without_lone_strays(measurements: Sequence[Measurement]) -> list[Measurement]:
    """Return the measurements, those unmeasured that took a far point where most frames have the target near.

    A slip of clock, site or camera moves the target in all frames; a star or a spot is taken for it in a few.
    """
    far = sum(m.measured and m.far for m in measurements)
    if 2 * far >= sum(m.measured for m in measurements):
        return list(measurements)
    reason = "only a point elsewhere, while most frames have the target where it is predicted"
    return [replace(m, x_px=float("nan"), reason=reason) if m.measured and m.far else m for m in measurements]


def usual_jitter_arcsec(plan: Plan, reference: str) -> float:
    """Return the scatter a frame has beyond its photon noise: limb motion by seeing, or part of a pixel.

    Daytime image motion of the limb is near a third of the seeing's width (Tatarskii's theory for a small aperture
    gives 0.36 FWHM; Roddier 1981, Progress in Optics 19, 281, section 7.3, from memory).
    """
    if reference in ("sun", "moon"):
        return max(0.2 * plan.rig.scale_arcsec_px, 0.35 * plan.site.seeing_arcsec)
    return max(0.1 * plan.rig.scale_arcsec_px, 0.2)


def _diagnosed(sightings: Sightings, question: Question) -> tuple[Diagnosis | None, Finding | None]:
    try:
        return diagnose(sightings, question), None
    except NoSolutionError as none:
        return None, Finding("unexplained", float("nan"), f"{none}.")


def _from_another_site(diagnosis: Diagnosis, promise: Promise, question: Question) -> Diagnosis:
    """Return the diagnosis that the frames come from a place away from the plan's, where that explains them."""
    plain = next((reading for reading in diagnosis.readings if reading.name == "plain"), None)
    if plain is None:
        return diagnosis
    moved = displaced_site(plain, promise, question)
    if moved is None or moved[1].fit.jitter_arcsec > explained_limit_arcsec(plain.sightings, question):
        return diagnosis
    return replace(diagnosis, reading=moved[1], findings=(moved[0],), explained=True)


def question_of(promise: Promise, target: str) -> Question:
    """Return what the readings of a plan's track need: other sites, other bodies, the usual scatter."""
    from planner.sequence.documents import observer_of

    plan, observer = promise.plan, observer_of(promise.plan.site)
    sites = {}
    if abs(observer.longitude_deg) > 0.2:
        flipped = replace(observer, longitude_deg=-observer.longitude_deg)
        sites["longitude-sign"] = PredictedPath.of_plan(plan, flipped)
    if abs(observer.latitude_deg) > 0.2:
        flipped = replace(observer, latitude_deg=-observer.latitude_deg)
        sites["latitude-sign"] = PredictedPath.of_plan(plan, flipped)
    reference = promise.path.geometry(np.array([promise.middle_tt_s])).reference
    return Question(
        path=promise.path,
        jitter_arcsec=usual_jitter_arcsec(plan, reference),
        clock_sigma_s=plan.rig.clock.sigma_s,
        plan_middle_tt_s=promise.middle_tt_s,
        other_sites=sites,
        other_bodies=other_bodies(promise, target, reference),
        target=proper(target),
        center_sigma_arcsec=CENTER_SIGMA_ARCSEC.get(reference, 0.0),
        roll_deg=promise.roll_deg,
    )


PLANETS = ("mercury", "venus", "mars", "jupiter", "saturn", "uranus", "neptune")


def other_bodies(promise: Promise, target: str, reference: str) -> dict[str, PredictedPath]:
    """Return the paths of the planets that could be taken for the target: all others, at the same times."""
    from planner.sky.discs import sky_disc

    if reference == "sun":
        return {}  # in front of the Sun there is only the one that transits

    def path_of(body: str) -> PredictedPath:
        def geometry(tt_s: np.ndarray):  # type: ignore[no-untyped-def]
            base = promise.path.geometry(tt_s)
            disc = sky_disc(body, promise.path.observer, tt_s)
            return replace(base, discs={**base.discs, body: disc}, target=body)

        return PredictedPath(geometry, promise.path.observer)

    return {body: path_of(body) for body in PLANETS if body != target}


def _with_fit(
    result: CheckResult,
    plan: Plan,
    promise: Promise,
    question: Question,
    diagnosis: Diagnosis,
    chosen: Sequence[Measurement],
) -> CheckResult:
    """Return the result with the numbers of the fit and the finer findings that only an explained track allows."""
    reading, fit = diagnosis.reading, diagnosis.reading.fit
    along, across = fit.rms_arcsec
    result = replace(
        result, rms_along_arcsec=along, rms_across_arcsec=across, jitter_arcsec=fit.jitter_arcsec
    )
    if not diagnosis.explained or reading.name == "wrong-body":
        return result
    clock = clock_findings(reading, plan, promise, question)
    camera = camera_findings(reading, plan, chosen)
    return replace(
        result,
        clock_offset_s=reading.clock_offset_s,
        clock_offset_sigma_s=fit.sigma["clock_s"],
        clock_drift_s_day=clock.drift_s_day,
        clock_drift_sigma_s_day=clock.drift_sigma_s_day,
        rotation_deg=camera.up_pa_deg,
        rotation_sigma_deg=camera.up_pa_sigma_deg,
        scale_arcsec_px=camera.scale_arcsec_px,
        scale_sigma_arcsec_px=camera.scale_sigma_arcsec_px,
        contacts=result.contacts
        or time_contacts(reading, promise, plan, camera.scale_arcsec_px, question.center_sigma_arcsec),
        findings=result.findings + clock.findings + camera.findings,
    )


def _line(promise: Promise, measurements: Sequence[Measurement], points: int = 300) -> np.ndarray:
    """Return the predicted path from the first frame to the last."""
    if len(measurements) < 2:
        return np.empty((0, 2))
    expected = promise.path.at(
        np.linspace(measurements[0].time.middle_tt_s, measurements[-1].time.middle_tt_s, points)
    )
    if promise.path.among_stars:
        return np.column_stack([expected.ra_deg, expected.dec_deg])
    return np.column_stack([expected.east_arcsec, expected.north_arcsec])


def _provenance(plan: Plan) -> dict[str, str]:
    from planner.provenance import content_hash, versions
    from planner.sequence.documents import dump_plan

    return {**versions(), "plan_hash": content_hash(dump_plan(plan))}
