"""Observed minus computed: residuals, fits, findings, report."""
