"""Sections ``[histogram]``, ``[displacement_histogram]``, ``[correlation]``, ``[temporal]`` and ``[lengths]``."""

from __future__ import annotations

import math
from itertools import pairwise
from typing import Literal, Self

from pydantic import model_validator

from meseta import typeset
from meseta.recipe.fields import Section, setting

__all__ = [
    "CorrelationSettings",
    "DisplacementHistogramSettings",
    "HistogramSettings",
    "LengthSettings",
    "TemporalSettings",
]


_STORED_PER_DECADE = 200
_STORED_WIDTH_G0 = 0.004


class HistogramSettings(Section):
    """The conductance histogram and the count matrix behind it."""

    ordered = (("low_g0", "high_g0"), ("region_low_nm", "region_high_nm"))

    axis: Literal["linear", "logarithmic"] = setting(
        "logarithmic", "Conductance axis", "Bins of equal width in G or in log10 G."
    )
    bins_per_decade: int = setting(
        50,
        "Bins per decade",
        "Of the logarithmic axis. Bins finer than two steps of the converter give combs.",
        ge=1,
        le=1000,
    )
    bin_width_g0: float = setting(0.01, "Bin width", "Of the linear axis.", unit="G0", gt=0, le=10)
    low_g0: float | None = setting(
        None,
        "Lowest conductance",
        "Lower end of the axis.",
        unit="G0",
        unset="3 robust sigma below the floor (linear), a tenth of the floor's sigma (logarithmic)",
    )
    high_g0: float = setting(10.0, "Highest conductance", "Upper end of the axis.", unit="G0", gt=0)
    edges_g0: list[float] = setting(
        None,
        "Given edges",
        "Edges of the bins, ascending (those of a published histogram, say); ends and widths above are then not used, "
        "and the axis tells only whether densities are per decade or per G0.",
        unit="G0",
        unset="bins of equal width",
        factory=list,
    )
    direction: Literal["opening", "closing"] = setting(
        "opening", "Direction", "Opening (pull) or closing (push) traces; they are never mixed."
    )
    region: Literal["phase", "after_zero", "before_zero", "displacement"] = setting(
        "phase",
        "Region",
        "'phase': all samples of the pull; 'after_zero': from the zero of displacement until "
        "shortly inside the floor (molecules); 'before_zero': up to the zero (metals); 'displacement': between two "
        "displacements from the zero.",
    )
    region_low_nm: float = setting(
        0.0,
        "Region from",
        "With 'displacement': from this displacement on, zero at the rupture (in the drive's own unit where that is "
        "not nm).",
        unit="nm",
    )
    region_high_nm: float = setting(1.0, "Region to", "With 'displacement': up to this displacement.", unit="nm")
    floor_tail_second: float = setting(
        0.005,
        "Tail inside the floor",
        "With 'after_zero': time for which samples at the floor still count.",
        unit="s",
        ge=0,
    )
    normalisation: Literal["nm_per_trace", "counts_per_trace", "counts", "probability", "traces_alike"] = setting(
        "nm_per_trace",
        "Normalisation",
        "Density of the histogram: length in nm (counts where the displacement is "
        "unknown) per trace, counts per trace, counts or share, each per decade or per G0. 'traces_alike': every trace "
        "weighs the same, however long it is.",
    )
    weak_traces: int = setting(20, "Weak below", "Bins reached by fewer traces are shown as weak.", unit="traces", ge=0)

    plateaus_by_length: bool = setting(
        False,
        "Plateaus by length",
        "Plateau histogram: every plateau weighs its length instead of one vote.",
    )

    @model_validator(mode="after")
    def _edges_ascend(self) -> Self:
        edges = self.edges_g0
        if edges and (len(edges) < 2 or any(low >= high for low, high in pairwise(edges))):
            raise ValueError("edges_g0 must be two or more ascending numbers")
        if edges and self.axis == "logarithmic" and edges[0] <= 0:
            raise ValueError(f"edges_g0 begins at {edges[0]:g}, and a logarithmic axis has no zero")
        return self

    @property
    def stored_low_g0(self) -> float | None:
        """Lower end of the count matrix: the decade around ``low_g0`` on a logarithmic axis, so that it may move."""
        if self.axis == "logarithmic" and self.low_g0 is not None and self.low_g0 > 0:
            return float(f"1e{math.floor(math.log10(self.low_g0) + 1e-9)}")
        return self.low_g0

    @property
    def stored_high_g0(self) -> float:
        """Upper end of the count matrix: the decade around ``high_g0`` on a logarithmic axis."""
        return float(f"1e{math.ceil(math.log10(self.high_g0) - 1e-9)}") if self.axis == "logarithmic" else self.high_g0

    @property
    def stored_bins_per_decade(self) -> int:
        """Bins per decade of the count matrix: the multiple of ``bins_per_decade`` nearest above 200 or 200 itself.

        Coarser histograms are exact sums of these, so that another width below 200 does not count anew.
        """
        return self.bins_per_decade * -(-_STORED_PER_DECADE // self.bins_per_decade)

    @property
    def stored_bin_width_g0(self) -> float:
        """Bin width of the count matrix on a linear axis: ``bin_width_g0`` halved, at most 6 times, above 0.004 G0.

        Halving is exact in binary numbers, so that the coarse edges are fine edges to the last bit.
        """
        width = self.bin_width_g0
        while width / 2 > _STORED_WIDTH_G0 and width * 64 > self.bin_width_g0:
            width /= 2
        return width


class DisplacementHistogramSettings(Section):
    """The 2D conductance-displacement histogram."""

    ordered = (("low_nm", "high_nm"), ("event_low_g0", "event_high_g0"))

    low_nm: float = setting(-0.5, "From", "Lower end of the displacement axis, zero at the rupture.", unit="nm")
    high_nm: float = setting(2.0, "To", "Upper end of the displacement axis.", unit="nm")
    bins: int = setting(250, "Displacement bins", "Number of bins of the displacement axis.", ge=2, le=4000)
    aligned_at: Literal["zero", "plateau_start", "plateau_end"] = setting(
        "zero",
        "Aligned at",
        "'zero': the zero of displacement; 'plateau_start', 'plateau_end': where the last plateau of a trace between "
        "two conductances begins or ends (a molecular junction forms or breaks); traces without one are left out.",
    )
    event_low_g0: float = setting(1e-6, "Plateaus from", "With plateaus: lowest conductance.", unit="G0", gt=0)
    event_high_g0: float = setting(0.1, "Plateaus to", "With plateaus: highest conductance.", unit="G0", gt=0)
    bins_per_decade: int = setting(50, "Bins per decade", "Of the logarithmic conductance axis.", ge=1, le=400)
    bin_width_g0: float = setting(0.02, "Bin width", "Of the linear conductance axis.", unit="G0", gt=0, le=10)

    @property
    def event(self) -> str:
        """What displacement is counted from, in words; empty where that is the zero of displacement."""
        if self.aligned_at == "zero":
            return ""
        end = "start" if self.aligned_at == "plateau_start" else "end"
        window = typeset.interval(self.event_low_g0, self.event_high_g0, "G0", 2).replace(" to ", " and ")
        return f"the {end} of the last plateau between {window}"


class CorrelationSettings(Section):
    """The 2D correlation histogram."""

    ordered = (("low_g0", "high_g0"),)

    bins_per_decade: int = setting(25, "Bins per decade", "Finer bins show only neighbours.", ge=1, le=200)
    bin_width_g0: float = setting(0.04, "Bin width", "Of the linear axis.", unit="G0", gt=0, le=10)
    low_g0: float | None = setting(
        None, "Lowest conductance", "Lower end of the axis.", unit="G0", gt=0, unset="6 sigma above the floor"
    )
    high_g0: float = setting(10.0, "Highest conductance", "Upper end of the axis.", unit="G0", gt=0)
    permutations: int = setting(
        200, "Permutations", "For the significance of correlations; 0 leaves it out.", ge=0, le=20000
    )


class TemporalSettings(Section):
    """The temporal histogram."""

    traces_a_column: int = setting(
        20, "Traces a column", "Consecutive traces summed in one column.", unit="traces", ge=1
    )


class LengthSettings(Section):
    """Length histograms."""

    ordered = (("low_g0", "high_g0"),)

    low_g0: float = setting(0.5, "Window from", "Lower conductance of the window.", unit="G0", gt=0)
    high_g0: float = setting(1.2, "Window to", "Upper conductance of the window.", unit="G0", gt=0)
    bin_width_nm: float = setting(0.02, "Bin width", "", unit="nm", gt=0)
    high_nm: float = setting(2.0, "Longest", "Upper end of the length axis.", unit="nm", gt=0)
