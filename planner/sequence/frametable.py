"""A plan frame by frame as CSV, for spreadsheets and other programs."""

from __future__ import annotations

import csv
import io

from planner.sequence.outlook import Outlook

COLUMNS = (
    "frame",
    "passage",
    "shot",
    "visit",
    "panel",
    "start_utc",
    "exposure_s",
    "gain",
    "filter",
    "tracking",
    "center_ra_deg",
    "center_dec_deg",
    "position_angle_deg",
)


def frames_csv(outlook: Outlook) -> str:
    """Return one line a frame, in time order, with a header line; times are UTC to the millisecond."""
    from planner.sky.timescale import utc_iso

    plan, frames = outlook.plan, outlook.frames
    sheet = io.StringIO()
    writer = csv.writer(sheet)
    writer.writerow(COLUMNS)
    starts = utc_iso(frames.start_tt_s, 3)
    for row in range(len(frames)):
        passage = plan.passages[int(frames.passage[row])]
        shot = passage.shots[int(frames.shot[row])]
        writer.writerow(
            [
                row + 1,
                passage.name,
                shot.name,
                "" if passage.visit is None else passage.visit,
                passage.panel or "",
                starts[row],
                f"{shot.exposure_s:g}",
                f"{shot.gain:g}",
                shot.filter or "",
                shot.tracking,
                f"{frames.ra_deg[row] % 360.0:.5f}",
                f"{frames.dec_deg[row]:.5f}",
                f"{frames.rotation_deg[row]:.2f}",
            ]
        )
    return sheet.getvalue()
