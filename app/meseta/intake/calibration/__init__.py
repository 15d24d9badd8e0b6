"""Recorded numbers -> conductance and displacement: amplifiers, constants, mains pickup, offset, drive."""
