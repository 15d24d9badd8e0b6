"""The calibration check-up: what a recording says of its own calibration."""
