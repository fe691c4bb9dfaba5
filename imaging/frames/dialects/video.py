"""Video (MP4, MOV, AVI, MKV): frames with their own times from the container, through FFmpeg's libraries."""

from __future__ import annotations

from collections.abc import Iterator
from datetime import datetime
from pathlib import Path
from typing import Any

import numpy as np

from imaging.frames.frame import Frame, FrameTime
from imaging.frames.reading import ReadOptions, check_size
from imaging.frames.times import NoTimeError, time_from_begin, time_from_local_iso
from planner.errors import FrameSetAside


def recognises(head: bytes, path: Path) -> bool:
    """Say whether the file begins as one of the usual containers does."""
    if head[4:8] == b"ftyp":
        return head[8:12] != b"crx "
    return (head[:4] == b"RIFF" and head[8:12] == b"AVI ") or head.startswith(b"\x1aE\xdf\xa3")


def count(path: Path) -> int:
    """Return the number of frames that the container states, or counts them."""
    import av

    with av.open(str(path)) as container:
        stream = container.streams.video[0]
        return stream.frames or sum(1 for _ in container.decode(stream))


def frames(path: Path, options: ReadOptions, start: int = 0, stop: int | None = None) -> Iterator[Frame]:
    """Yield frames as they are decoded; a frame's time is the container's creation time plus its own offset."""
    import av

    try:
        container = av.open(str(path))
    except av.FFmpegError as error:
        raise FrameSetAside(path, f"is named like video but cannot be read ({error.strerror})") from None
    with container:
        if not container.streams.video:
            raise FrameSetAside(path, "holds no video stream")
        stream = container.streams.video[0]
        check_size(path, stream.codec_context.width, stream.codec_context.height)
        began, missing = _began(container, stream, options)
        step = float(1 / stream.average_rate) if stream.average_rate else None
        first: float | None = None
        for index, picture in enumerate(container.decode(stream)):
            if stop is not None and index >= stop:
                break
            at = picture.time
            first = at if first is None else first
            if index < start:
                continue
            time = None
            if began is not None and at is not None and first is not None:
                # a frame lasts at most until the next one
                time = time_from_begin(
                    began.begin_tt_s + at - first,
                    12**0.5 * began.sigma_s,
                    step,
                    f"{began.source} and frame time",
                )
            deep = picture.format.components[0].bits > 8
            grey = picture.to_ndarray(format="gray16le" if deep else "gray")
            colour = picture.to_ndarray(format="rgb24").astype(np.float32) if options.colour else None
            yield Frame(
                path=path,
                data=grey.astype(np.float32),
                time=time,
                time_missing=missing if time is None else None,
                exposure_s=None,
                row_zero="top",
                colour=colour,
                saturation_adu=65535.0 if deep else 255.0,
                header={"frame_time_s": at, "frame_step_s": step},
                frame_index=index,
            )


def _began(container: Any, stream: Any, options: ReadOptions) -> tuple[FrameTime | None, str | None]:
    for tags in (stream.metadata, container.metadata):
        text = tags.get("creation_time")
        if text:
            try:
                moment = datetime.fromisoformat(text.replace("Z", "+00:00"))
                return time_from_local_iso(moment, options.zone, "creation_time of the container"), None
            except ValueError:
                return None, f"creation_time is {text!r}, which is not a date and time"
            except NoTimeError as error:
                return None, str(error)
    return None, "the container has no creation_time"
