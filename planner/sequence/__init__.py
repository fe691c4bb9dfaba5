"""What to shoot and when: brief, site, rig, exposure, framing, nights, plan."""
