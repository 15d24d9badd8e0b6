"""Readers: one module a file format.  To add a format, write a module with a Reader and name it in the registry."""
