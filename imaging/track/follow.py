"""Following a folder: each frame is measured once it is complete, and the report is renewed."""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path

from imaging.track.checking import CheckOptions, Outcome, frame_files, measure_file, understand
from imaging.track.measure import Measurer
from imaging.track.measurement import Measurement
from imaging.track.nominal import Promise
from imaging.track.output import refuse_outputs, write_outputs
from imaging.track.result import CheckResult, SetAside
from planner.errors import InputError
from planner.sequence.models import Plan

QUIET_S = 1.0  # a file that has not grown for so long is complete
PATIENCE_S = 10.0  # a file that cannot be read is set aside when it has not changed for so long
RENEW_S = 2.0  # the page is not written more often than this


@dataclass
class Pending:
    """Files that were seen and are not measured yet: when their size last changed, by an injected clock."""

    quiet_s: float = QUIET_S
    patience_s: float = PATIENCE_S
    clock: Callable[[], float] = time.monotonic
    seen: dict[Path, tuple[int, float]] = field(default_factory=dict)
    done: set[Path] = field(default_factory=set)

    def look(self, files: list[Path]) -> None:
        """Take note of sizes."""
        now = self.clock()
        for path in files:
            if path in self.done:
                continue
            try:
                size = path.stat().st_size
            except OSError:
                self.seen.pop(path, None)
                continue
            if path not in self.seen or self.seen[path][0] != size:
                self.seen[path] = size, now

    def complete(self) -> list[Path]:
        """Return the files that have stopped growing, in name order."""
        now = self.clock()
        return sorted(
            path for path, (size, since) in self.seen.items() if size and now - since >= self.quiet_s
        )

    def given_up(self, path: Path) -> bool:
        """Say whether a file has been unreadable for long enough."""
        return self.clock() - self.seen[path][1] >= self.patience_s

    def finish(self, path: Path) -> None:
        """Take a file off the list."""
        self.seen.pop(path, None)
        self.done.add(path)


def follow_folder(
    plan: Plan,
    plan_name: str,
    folder: Path,
    output: Path,
    options: CheckOptions,
    idle_s: float | None = None,
    say: Callable[[str], None] = print,
    force: bool = False,
    tick: Callable[[int, int], None] | None = None,
) -> tuple[CheckResult, list[Measurement]]:
    """Measure frames as they arrive, renew track and report, and return the last result.

    Ends on KeyboardInterrupt, or after `idle_s` without a new frame.
    """
    from watchfiles import watch

    if not folder.is_dir():
        raise InputError(f"{folder}: is not a folder of frames")
    refuse_outputs(output, None, force)
    promise = Promise(plan)
    measurer, pending = Measurer(promise, options.lens), Pending()
    outcomes: list[Outcome] = []
    result, measurements = understand(plan, plan_name, outcomes, promise)
    last_new = last_written = time.monotonic()
    unwritten = False
    say(f"following {folder}; report at {output / 'report.html'}; Ctrl-C ends")
    watcher = watch(folder, rust_timeout=500, yield_on_timeout=True, raise_interrupt=False, debounce=200)
    try:
        for _ in watcher:
            pending.look(_files(folder))
            for path in pending.complete():
                new = measure_file(measurer, path, options)
                if all(isinstance(outcome, SetAside) for outcome in new) and not pending.given_up(path):
                    continue  # perhaps it is still being written
                pending.finish(path)
                outcomes += new
                last_new, unwritten = time.monotonic(), True
                for outcome in new:
                    say(_line(outcome))
                if tick:
                    tick(len(pending.done), len(pending.done) + len(pending.seen))
            now = time.monotonic()
            if unwritten and (now - last_written >= RENEW_S or not pending.complete()):
                result, measurements = understand(plan, plan_name, outcomes, promise)
                write_outputs(result, measurements, output, force=True)
                say(result.verdict)
                last_written, unwritten = now, False
            if idle_s is not None and not pending.seen and now - last_new >= idle_s:
                break
    except KeyboardInterrupt:
        pass
    if unwritten:
        result, measurements = understand(plan, plan_name, outcomes, promise)
        write_outputs(result, measurements, output, force=True)
    return result, measurements


def _files(folder: Path) -> list[Path]:
    try:
        return frame_files(folder)
    except InputError:
        return []


def _line(outcome: Outcome) -> str:
    if isinstance(outcome, SetAside):
        return f"{outcome.file}: set aside, {outcome.reason}"
    if not outcome.measured:
        return f"{outcome.file}: unmeasured, {outcome.reason}"
    return f"{outcome.file}: measured by {outcome.solved_by}"
