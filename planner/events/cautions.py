"""The usual cautions, in one place; common practice, no source. They defer to local rules and licensed practice."""

SUN = (
    "Never look at the Sun through optics, and never point optics at it, without a filter made for the purpose "
    "over the front of the aperture, checked and secured before every use; cap the finder. A filter at the "
    "eyepiece can shatter. Follow local rules.",
)
SUN_NEAR = (
    "The Sun is within {0:.0f} degrees of the target: block it physically before any optics point there, "
    "and keep slews from crossing it.",
)
NIGHT = ("Night work: know the ground by day, keep power and cables dry, tell someone where you are.",)
FAR_TIME = (
    "The Earth's rotation at this date is not known from tables (1 sigma {0:.1f} s), nor are leap seconds: repeat "
    "the prediction nearer to the event.",
)
ROUND_LIMB = (
    "The Moon's limb is taken as smooth: mountains and valleys shift a contact by some seconds, "
    "and decide alone near a graze.",
)
