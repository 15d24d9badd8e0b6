"""The file check: what a recording was taken for, as a form with a live preview, before anything is read in."""

from meseta.window.filecheck.page import FileCheck

__all__ = ["FileCheck"]
