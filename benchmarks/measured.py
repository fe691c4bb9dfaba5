"""How benchmarks say what was measured, and on what."""

from __future__ import annotations

import os
import platform
from importlib import metadata


def machine() -> str:
    """Return one line: processor, cores, system, Python, and the libraries that matter."""
    processor = platform.processor() or platform.machine()
    try:
        with open("/proc/cpuinfo", encoding="utf-8") as file:
            processor = next(line.split(":", 1)[1].strip() for line in file if line.startswith("model name"))
    except (OSError, StopIteration):
        pass
    libraries = ", ".join(f"{name} {metadata.version(name)}" for name in ("numpy", "skyfield", "astropy"))
    return (
        f"{processor}, {os.cpu_count()} cores; {platform.system()} {platform.release()}; "
        f"Python {platform.python_version()}; {libraries}"
    )


def table(header: list[str], rows: list[list[str]]) -> str:
    """Return a Markdown table."""
    lines = [header, ["---"] * len(header), *rows]
    return "\n".join("| " + " | ".join(cells) + " |" for cells in lines)
