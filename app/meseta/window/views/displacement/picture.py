"""The 2D histograms as images, made off the window's thread."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from meseta.window.pictures import scaled_image, usual_top
from meseta.work import Work

if TYPE_CHECKING:
    from meseta.histograms import DisplacementHistogram

__all__ = ["DisplacementImage", "DisplacementPicture", "displacement_picture"]


@dataclass(frozen=True)
class DisplacementImage:
    """One 2D histogram as places 0..255 in a colour table, the density of the last colour, and what it was made of."""

    places: npt.NDArray[np.uint8]
    top: float
    histogram: DisplacementHistogram


@dataclass(frozen=True)
class DisplacementPicture:
    """All traces, and over them those that the conditions pick."""

    whole: DisplacementImage
    part: DisplacementImage | None
    scale: str


def _image(histogram: DisplacementHistogram, scale: str) -> DisplacementImage:
    top = usual_top(histogram.density)
    return DisplacementImage(scaled_image(histogram.density, scale, top), top, histogram)


def displacement_picture(
    whole: DisplacementHistogram,
    part: DisplacementHistogram | None,
    scale: str,
    before: DisplacementPicture | None,
    work: Work,
) -> DisplacementPicture:
    """Return the images of both histograms; what ``before`` shows already is not made again."""

    def made(histogram: DisplacementHistogram, known: DisplacementImage | None) -> DisplacementImage:
        work.check()
        same = before is not None and before.scale == scale and known is not None and known.histogram is histogram
        return known if same and known is not None else _image(histogram, scale)

    fits = part is not None and part.counts.shape == whole.counts.shape
    return DisplacementPicture(
        made(whole, None if before is None else before.whole),
        made(part, None if before is None else before.part) if fits and part is not None else None,
        scale,
    )
