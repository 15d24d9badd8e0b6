"""What a file means: roles and units of channels, metadata, layouts that are kept under a name."""
