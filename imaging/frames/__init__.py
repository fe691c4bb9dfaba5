"""Pixels and their times: readers, timestamps, calibration, rendering."""
