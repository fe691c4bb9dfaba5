"""Where the frame points: detection, pattern matching, plate solution."""
