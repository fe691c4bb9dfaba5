"""What a plan says about safety; common practice, no source. It defers to local rules and licensed practice."""

from __future__ import annotations

from planner.events.cautions import NIGHT, SUN_NEAR
from planner.sequence.setting import Setting

PRECEDENCE = (
    "Local rules, the rules of the site and licensed practice take precedence over anything in this plan."
)
SUN = (
    "Fit a certified solar filter over the front of the aperture and secure it before the optics are pointed at the "
    "Sun; check it against a bright lamp for pinholes; take it off only after they are pointed away.",
    "Cap or remove the finder and any guide scope, or filter their fronts too.",
    "Nobody looks through the rig during the run. A camera sees what an eye must not.",
    "Never leave the rig unattended in sunlight: a stopped drive turns the Sun out of the field and onto something.",
)
POWER = "Power: use a residual-current breaker outdoors, fuse batteries, keep connectors off wet ground."
LASER = "No pointing lasers near airfields or traffic; elsewhere only by those who are licensed to use them."


def cautions_of(setting: Setting) -> list[str]:
    """Return the cautions of a plan: those of the event, of the Sun or the night, of power, and who has precedence."""
    # over months the Sun comes near at some time; whether it does at a visit is told by the rule `sun-near`
    passing = SUN_NEAR[0].split("{")[0] if setting.family.campaign else None
    said = [text for text in setting.circumstances.cautions if not (passing and text.startswith(passing))]
    if setting.family.reference == "sun":
        said += SUN
    else:
        said += [text for text in (*NIGHT, LASER) if text not in said]
    return [*said, POWER, PRECEDENCE]
