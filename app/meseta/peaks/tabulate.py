"""From fits to the peak table and the curves to draw."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from meseta.histograms.results import ConductanceHistogram, Resampling
from meseta.peaks.calibration import CalibrationErrors, calibration_shifts
from meseta.peaks.doubts import sample_verdicts
from meseta.peaks.meaning import assignment, channels_at_least
from meseta.peaks.model import WIDTH_TO_FWHM, Model
from meseta.peaks.read_off import area_scale, curves_of, distance_g0, height_of, mode_of, on_g0, plateau_median
from meseta.peaks.results import PeakFit, PeakTable, PositionShift
from meseta.peaks.stretch import FittedWindow, interval_of
from meseta.peaks.systematic import half_spread
from meseta.peaks.verdicts import fit_verdicts
from meseta.quantities import G0_SIEMENS, R0_OHM
from meseta.recipe.peaks import PeakSettings
from meseta.segmentation.results import PlateauTable

__all__ = ["empty_fit", "tabulate"]

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True)
class _Row:
    """One peak on its way into the table; conductances in G0."""

    name: str
    range_g0: tuple[float, float]
    position_g0: tuple[float, float, float]
    choices_g0: float
    fwhm: tuple[float, float, float]
    area: tuple[float, float, float]
    height: float
    status: str
    mode_g0: float
    plateau_median_g0: float
    plateaus: int
    held: str
    shifts_g0: dict[tuple[str, str, bool], float]


def tabulate(
    histogram: ConductanceHistogram,
    settings: PeakSettings,
    parts: Sequence[FittedWindow],
    resampling: Resampling | None,
    plateaus: PlateauTable | None,
    calibration: CalibrationErrors | None = None,
) -> PeakFit:
    """Return the peak table and the fitted curves of all stretches together."""
    rows: list[_Row] = []
    for part in parts:
        rows += _rows(histogram, part, resampling, plateaus)
    order = sorted(range(len(rows)), key=lambda at: rows[at].position_g0[0])
    rows = [rows[at] for at in order]
    shifts = [
        PositionShift(kind, name, np.array([row.shifts_g0.get((kind, name, counted), np.nan) for row in rows]), counted)
        for kind, name, counted in dict.fromkeys(key for row in rows for key in row.shifts_g0)
    ]
    moves = _calibration_moves(np.array([row.position_g0[0] for row in rows]), calibration)
    table = _table(histogram, settings, rows, resampling, parts[0].fitted.model.logarithmic, moves)
    score = sum(part.fitted.score for part in parts)
    freedom = sum(part.fitted.degrees_of_freedom for part in parts)
    grid, model, background, components, observed, scatter = curves_of(histogram, parts, order, resampling)
    return PeakFit(table, grid, model, background, components, observed, (*shifts, *moves), score / freedom, scatter)


def _calibration_moves(position_g0: Floats, errors: CalibrationErrors | None) -> tuple[PositionShift, ...]:
    """Return what one standard error of each stated constant of the calibration moves."""
    if errors is None:
        return ()
    moved = calibration_shifts(position_g0, *errors.stated())
    parts = (
        ("gain", errors.gain_relative, moved.gain_g0),
        ("bias", errors.bias_relative, moved.bias_g0),
        ("offset", errors.offset_g0, moved.offset_g0),
        ("series resistance", errors.series_resistance_ohm, moved.series_resistance_g0),
    )
    return tuple(PositionShift("calibration", name, values) for name, given, values in parts if given > 0)


def empty_fit(histogram: ConductanceHistogram, settings: PeakSettings, reason: str) -> PeakFit:
    """Return a fit without peaks: one row of NaN whose status says why."""
    nothing = (np.nan, np.nan, np.nan)
    row = _Row("", (np.nan, np.nan), nothing, np.nan, nothing, nothing, np.nan, reason, np.nan, np.nan, 0, "", {})
    logarithmic = (histogram.grid.axis if settings.axis == "as_histogram" else settings.axis) == "logarithmic"
    blank = np.full(histogram.grid.bins, np.nan)
    return PeakFit(
        table=_table(histogram, settings, [row], None, logarithmic),
        grid=histogram.grid,
        model=blank,
        background=blank,
        components=blank[None, :],
        observed=histogram.density,
        shifts=(),
        goodness=np.nan,
    )


def _rows(
    histogram: ConductanceHistogram,
    part: FittedWindow,
    resampling: Resampling | None,
    plateaus: PlateauTable | None,
) -> list[_Row]:
    fitted, model = part.fitted, part.fitted.model
    factor = 1.0 if resampling is None else resampling.widen
    counts = histogram.counts[part.window.first : part.window.last].astype(float)
    verdicts = fit_verdicts(fitted, counts)
    intervals = [interval_of(part, column, factor * part.wider) for column in range(3)]
    spread = half_spread(part.shifts, model.peaks)
    unit = area_scale(histogram, part)
    rows = []
    for peak, (area, position, width, _) in enumerate(fitted.peaks):
        said = verdicts[peak] + sample_verdicts(histogram, part, peak, intervals, resampling)
        failed = not fitted.converged
        place = np.nan if failed else position
        ends = (np.nan, np.nan) if _is_fixed(model, peak) else (intervals[1].low[peak], intervals[1].high[peak])
        near = (position - WIDTH_TO_FWHM * width / 2, position + WIDTH_TO_FWHM * width / 2)
        median, number = plateau_median(plateaus, near, model.logarithmic)
        density = unit[peak] * area
        rows.append(
            _Row(
                name=part.window.starts[peak].name,
                range_g0=_both(on_g0(np.array(model.range_u), model.logarithmic)),
                position_g0=_three(on_g0(np.array([place, *ends]), model.logarithmic)),
                choices_g0=distance_g0(place, spread[peak], model.logarithmic),
                fwhm=_three(WIDTH_TO_FWHM * np.array([width, intervals[2].low[peak], intervals[2].high[peak]])),
                area=_three(unit[peak] * np.array([area, intervals[0].low[peak], intervals[0].high[peak]])),
                height=density / (width * np.sqrt(2 * np.pi))
                if model.shape == "gaussian"
                else height_of(part, peak, density),
                status="; ".join(said) or "ok",
                mode_g0=np.nan if failed else mode_of(histogram, model.logarithmic, near),
                plateau_median_g0=median,
                plateaus=number,
                held=_held(model, peak),
                shifts_g0={
                    (shift.kind, shift.choice, shift.counted): float(
                        on_g0(np.array(place + shift.moved_u[peak]), model.logarithmic)
                        - on_g0(np.array(place), model.logarithmic)
                    )
                    for shift in part.shifts
                },
            )
        )
    return rows


def _three(values: Floats) -> tuple[float, float, float]:
    return float(values[0]), float(values[1]), float(values[2])


def _both(values: Floats) -> tuple[float, float]:
    return float(values[0]), float(values[1])


def _is_fixed(model: Model, peak: int) -> bool:
    """Return whether the user, and no data, say where a peak is."""
    tied = model.tied_positions()
    if peak not in tied:
        return bool(model.fixed_position[peak])
    return model.position_tie == "multiples" and bool(model.fixed_position[tied].any())


def _held(model: Model, peak: int) -> str:
    """Return in words what of a peak was fixed, tied or bounded."""
    said = []
    if model.fixed_position[peak]:
        said.append("position fixed")
    if peak in model.tied_positions():
        behind = " behind a series resistance" if model.position_tie == "ladder" else ""
        said.append(f"position tied as multiple {model.numbers()[peak]:g}{behind}")
    if model.fixed_width[peak]:
        said.append("width fixed")
    if peak in model.tied_widths():
        said.append("relative width tied")
    return "; ".join(said)


def _table(
    histogram: ConductanceHistogram,
    settings: PeakSettings,
    rows: Sequence[_Row],
    resampling: Resampling | None,
    logarithmic: bool,
    moves: Sequence[PositionShift] = (),
) -> PeakTable:
    count = len(rows)
    position = np.array([row.position_g0[0] for row in rows])
    choices = np.array([row.choices_g0 for row in rows])
    calibration = np.sqrt(sum((move.moves_by_g0**2 for move in moves), np.zeros(count)))
    per_axis = " / decade" if histogram.grid.axis == "logarithmic" else " / G0"
    with np.errstate(invalid="ignore", divide="ignore"):
        ohm = R0_OHM / position
    return PeakTable(
        peak=np.array([row.name or str(number + 1) for number, row in enumerate(rows)]),
        axis=np.full(count, "logarithmic" if logarithmic else "linear"),
        shape=np.full(count, settings.shape),
        background=np.full(count, settings.background),
        fit_low_g0=np.array([row.range_g0[0] for row in rows]),
        fit_high_g0=np.array([row.range_g0[1] for row in rows]),
        traces=np.full(count, histogram.traces, np.int64),
        position_g0=position,
        position_low_g0=np.array([row.position_g0[1] for row in rows]),
        position_high_g0=np.array([row.position_g0[2] for row in rows]),
        position_systematic_g0=np.hypot(choices, calibration),
        position_siemens=position * G0_SIEMENS,
        position_ohm=ohm,
        fwhm=np.array([row.fwhm[0] for row in rows]),
        fwhm_low=np.array([row.fwhm[1] for row in rows]),
        fwhm_high=np.array([row.fwhm[2] for row in rows]),
        area_per_trace=np.array([row.area[0] for row in rows]),
        area_low=np.array([row.area[1] for row in rows]),
        area_high=np.array([row.area[2] for row in rows]),
        height=np.array([row.height for row in rows]),
        status=np.array([row.status for row in rows]),
        resampling=np.full(count, "" if resampling is None else resampling.scheme),
        area_unit=np.full(count, histogram.density_unit.removesuffix(per_axis)),
        height_unit=np.full(count, histogram.density_unit),
        mode_g0=np.array([row.mode_g0 for row in rows]),
        plateau_median_g0=np.array([row.plateau_median_g0 for row in rows]),
        plateaus=np.array([row.plateaus for row in rows], np.int64),
        assigned=np.array([assignment(value, settings.names) for value in position]),
        channels_at_least=np.array([channels_at_least(value) for value in position], np.int64),
        position_choices_g0=choices,
        position_calibration_g0=np.where(np.isfinite(position), calibration, np.nan),
        held=np.array([row.held for row in rows]),
    )
