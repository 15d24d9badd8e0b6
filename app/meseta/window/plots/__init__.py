"""What the plots are made of: axes with tick text of our own, gestures, the panel that all views build on."""
