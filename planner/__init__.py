"""Where and when the sky moves, what to shoot, and doing it."""
