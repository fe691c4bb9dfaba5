"""Every exception this project raises on purpose, drawn as a tree.

    SyzygraphError
    ├── InputError            the user's input is wrong; exit code 2, one line says where
    │   ├── DocumentError     ... in a YAML document: file, line, key, found, allowed
    │   └── OutputExistsError ... would overwrite what the user made; `--force` replaces it
    ├── FrameSetAside         a frame cannot be used; the run goes on; exit code 1
    └── NoSolutionError       a fit or a plate solution cannot be defended by the data

Anything else that escapes is a defect of ours: exit code 3, and a log with the traceback is written.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

EXIT_DONE = 0
EXIT_WITH_RESERVATIONS = 1
EXIT_INPUT_WRONG = 2
EXIT_DEFECT = 3
EXIT_INTERRUPTED = 130


class SyzygraphError(Exception):
    """Root of all errors raised on purpose."""


class InputError(SyzygraphError):
    """The user's input is wrong: the message names what was found and what is allowed, in one line."""


@dataclass
class DocumentError(InputError):
    """A value in a YAML document is wrong.

    `line` is 1-based; `key` is a dotted path such as `rig.optics.focal_length_mm`.
    """

    path: str | Path
    line: int | None
    key: str
    found: str
    allowed: str

    def __str__(self) -> str:
        """Give the one line that a user sees."""
        where = f"{self.path}:{self.line}" if self.line is not None else f"{self.path}"
        return f"{where}: {self.key}: found {self.found}; {self.allowed}"


class OutputExistsError(InputError):
    """An output that exists would be overwritten."""

    def __init__(self, path: str | Path):
        super().__init__(f"{path}: exists already and is kept; give another name, or --force to replace it")


@dataclass
class FrameSetAside(SyzygraphError):
    """A frame cannot be used, for this reason; the run goes on without it."""

    path: str | Path
    reason: str

    def __str__(self) -> str:
        """Give the file and the reason."""
        return f"{self.path}: {self.reason}"


class NoSolutionError(SyzygraphError):
    """The data do not determine what was asked; the message says what was tried and what would help."""
