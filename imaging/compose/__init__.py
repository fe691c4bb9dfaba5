"""The picture: registration, stacking, path plot, time-lapse, statement of truth."""
