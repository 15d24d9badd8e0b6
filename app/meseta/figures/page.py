"""The printed page: one style, one face, sizes in millimetres and points, and files that are the same byte for byte.

Figures are made without pyplot, so nothing here depends on a display or on global state beyond matplotlib's
parameters, which are set from the style sheet in the resources and the recipe, never from the user's own.
"""

from __future__ import annotations

import base64
import html
import io
import re
import warnings
from collections.abc import Iterator, Sequence
from contextlib import AbstractContextManager, contextmanager
from pathlib import Path
from typing import Any, Final

import matplotlib
from fontTools import subset
from fontTools.ttLib import TTFont
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.backends.backend_pdf import FigureCanvasPdf, PdfPages
from matplotlib.backends.backend_svg import FigureCanvasSVG
from matplotlib.figure import Figure
from matplotlib.font_manager import fontManager

from meseta import __version__
from meseta.errors import OutputError
from meseta.recipe.figure import FigureSettings
from meseta.resources import resource

__all__ = ["FACE", "HEAVY_FACE", "face_style", "new_figure", "page_style", "save_figure", "save_pages", "svg_text"]

FACE: Final = "Roboto"
"""The face of all figures; it lies in the resources (Apache License 2.0) and has real super- and subscripts."""
HEAVY_FACE: Final = "Roboto Medium"
"""For panel letters and headings."""
_FILES: Final = {FACE: "Roboto-Regular.ttf", HEAVY_FACE: "Roboto-Medium.ttf"}
_MM_AN_INCH: Final = 25.4
_DPI: Final = 600
_CREATOR: Final = f"Meseta {__version__}"
_SVG_FALLBACK: Final = "Arial, Helvetica, 'DejaVu Sans', sans-serif"


def _fonts_at_hand() -> None:
    """Make the bundled face known to matplotlib, once."""
    known = {entry.fname for entry in fontManager.ttflist}
    for name in _FILES.values():
        path = str(resource("figures", "fonts", name))
        if path not in known:
            fontManager.addfont(path)


@contextmanager
def page_style(settings: FigureSettings) -> Iterator[None]:
    """Set matplotlib's parameters for print within a ``with`` block; the user's own parameters play no part."""
    _fonts_at_hand()
    style = matplotlib.rc_params_from_file(resource("figures", "print.mplstyle"), use_default_template=False)
    size = settings.text_point
    sizes: dict[str, Any] = {"font.size": size, "figure.dpi": 100, "svg.hashsalt": "meseta"}
    for name in ("axes.titlesize", "axes.labelsize", "xtick.labelsize", "ytick.labelsize", "legend.fontsize"):
        sizes[name] = size
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", matplotlib.MatplotlibDeprecationWarning)
        base: dict[str, Any] = {
            name: value
            for name, value in matplotlib.rcParamsDefault.items()
            if not name.startswith(("backend", "webagg", "interactive", "toolbar"))
        }
        with _parameters({**base, **style, **sizes}):
            yield


def _parameters(values: Any) -> AbstractContextManager[None]:
    return matplotlib.rc_context(values)


def new_figure(settings: FigureSettings, height_mm: float, width_mm: float | None = None) -> Figure:
    """Return an empty figure of the recipe's width (or ``width_mm``); call within :func:`page_style`."""
    width = settings.width_mm if width_mm is None else width_mm
    figure = Figure(figsize=(width / _MM_AN_INCH, height_mm / _MM_AN_INCH))
    FigureCanvasAgg(figure)
    return figure


# -- files ----------------------------------------------------------------------------------------------------------


def save_figure(figure: Figure, path: str | Path) -> None:
    """Write a figure as PDF, SVG or PNG, by the suffix of the path; the same figure gives the same bytes.

    PDF and SVG are vectors with embedded fonts and live text; PNG has 300 dots an inch.

    Raises
    ------
    OutputError
        Where the suffix is unknown or the file cannot be written.
    """
    path = Path(path)
    suffix = path.suffix.lower()
    if suffix not in (".pdf", ".svg", ".png"):
        raise OutputError(f"'{suffix}' is not a figure format", str(path), "use .pdf, .svg or .png")
    content = {".pdf": _pdf_bytes, ".svg": _svg_bytes, ".png": _png_bytes}[suffix]([figure])
    _write(path, content)


def save_pages(figures: Sequence[Figure], path: str | Path) -> None:
    """Write figures as the pages of one PDF."""
    _write(Path(path), _pdf_bytes(figures))


def svg_text(figure: Figure, prefix: str = "") -> str:
    """Return a figure as an ``<svg>`` element to stand inside an HTML page, without its face (:func:`face_style`).

    ``prefix`` goes before every identifier in it, so that several figures on one page do not mix.
    """
    text = _drawn_svg(figure)
    text = text[text.index("<svg") :]
    if prefix:
        text = re.sub(r'\bid="', f'id="{prefix}-', text)
        text = re.sub(r'(xlink:href="#|url\(#)', rf"\1{prefix}-", text)
    return text


def face_style(svg: str) -> str:
    """Return CSS rules that embed the faces used in SVG text, with no more characters than it uses."""
    texts = re.findall(r"<text[^>]*>(.*?)</text>", svg, flags=re.DOTALL)
    characters = sorted(set(html.unescape(re.sub(r"<[^>]+>", "", "".join(texts)))) | set("0123456789"))
    return "".join(
        f"@font-face{{font-family:'{face}';src:url(data:font/ttf;base64,{_subset(name, characters)})}}"
        for face, name in _FILES.items()
        if f"'{face}'" in svg
    )


def _write(path: Path, content: bytes) -> None:
    try:
        path.write_bytes(content)
    except OSError as error:
        raise OutputError(f"cannot be written ({error.strerror})", str(path), "choose another place") from error


@contextmanager
def _file_parameters() -> Iterator[None]:
    parameters: dict[str, Any] = {"pdf.fonttype": 42, "svg.fonttype": "none", "svg.hashsalt": "meseta"}
    with _parameters(parameters):
        yield


def _pdf_bytes(figures: Sequence[Figure]) -> bytes:
    buffer = io.BytesIO()
    about: dict[str, Any] = {"Creator": _CREATOR, "Producer": _CREATOR, "CreationDate": None}
    with _file_parameters(), PdfPages(buffer, metadata=about) as pages:
        for figure in figures:
            FigureCanvasPdf(figure)
            pages.savefig(figure, dpi=_DPI)
    return buffer.getvalue()


def _png_bytes(figures: Sequence[Figure]) -> bytes:
    buffer = io.BytesIO()
    with _file_parameters():
        FigureCanvasAgg(figures[0]).print_figure(buffer, format="png", dpi=300, metadata={"Software": _CREATOR})
    return buffer.getvalue()


def _svg_bytes(figures: Sequence[Figure]) -> bytes:
    svg = _drawn_svg(figures[0])
    return svg.replace("<defs>", f'<defs>\n  <style type="text/css">{face_style(svg)}</style>', 1).encode()


def _drawn_svg(figure: Figure) -> str:
    """Return the SVG file of a figure with live text; where the face is not at hand a similar one stands in."""
    buffer = io.BytesIO()
    about = {"Creator": _CREATOR, "Date": None, "Format": None, "Type": None}
    with _file_parameters():
        FigureCanvasSVG(figure).print_figure(buffer, format="svg", dpi=_DPI, metadata=about)
    return re.sub(rf"('{FACE}(?: Medium)?')[^;\"]*", rf"\1, {_SVG_FALLBACK}", buffer.getvalue().decode())


def _subset(name: str, characters: Sequence[str]) -> str:
    """Return the named font file with only these characters, as base64."""
    font = TTFont(resource("figures", "fonts", name), recalcTimestamp=False)
    options = subset.Options(layout_features=[], notdef_outline=True, recalc_timestamp=False, hinting=False)
    tool = subset.Subsetter(options)
    tool.populate(text="".join(characters))
    tool.subset(font)
    buffer = io.BytesIO()
    font.save(buffer)
    return base64.b64encode(buffer.getvalue()).decode()
