"""The front door: one file a command; the only place that imports imaging from planner."""
