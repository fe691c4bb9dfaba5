"""Rows of tests/authorities/sky.csv: published values, each with its source."""

from __future__ import annotations

import csv
import re

from tests.conftest import ROOT


def published(topic, containing=""):
    with (ROOT / "tests/authorities/sky.csv").open(encoding="utf-8") as file:
        return [
            row
            for row in csv.DictReader(file)
            if row["topic"] == topic and containing in row["quantity"] + row["source"]
        ]


def numbers(text):
    return [float(found) for found in re.findall(r"[-+]?\d+(?:\.\d+)?(?:[eE][-+]?\d+)?", text)]


def hours_deg(text):
    """Return degrees of `16h33m59.3s` or `-20d53m31.6s`."""
    sign, whole, minute, second = re.fullmatch(r"([-+]?)(\d+)[hd](\d+)m([\d.]+)s", text).groups()
    value = int(whole) + int(minute) / 60 + float(second) / 3600
    return (-value if sign == "-" else value) * (15 if "h" in text else 1)
