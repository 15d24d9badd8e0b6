"""Records -> traces: by the drive, by thresholds, by marks."""
