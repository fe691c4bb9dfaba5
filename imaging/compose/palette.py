"""Colours of the path plot: light for paper, dark for screens."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class Palette:
    """Colours of a version; line styles and markers alone tell series apart, so that grey copies stay readable."""

    paper: str
    ink: str
    quiet: str
    faint: str
    predicted: str
    measured: str
    other: str
    disc: str
    lit: str
    star: str


LIGHT = Palette(
    paper="#ffffff", ink="#1c2126", quiet="#5d6770", faint="#c9d0d6", predicted="#2b5c8a", measured="#b3401f",
    other="#5a7d1f", disc="#fbf3df", lit="#fbf3df", star="#39424a",
)  # fmt: skip
DARK = Palette(
    paper="#0e1216", ink="#e8e4da", quiet="#9aa3ab", faint="#38424b", predicted="#79b4e3", measured="#f2a65a",
    other="#b5d97a", disc="#22211c", lit="#45423a", star="#e9ecef",
)  # fmt: skip
