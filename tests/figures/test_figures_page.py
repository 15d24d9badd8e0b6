"""Files: embedded fonts, live text, the same bytes each time, no trace of pyplot or of the user's own parameters."""

from __future__ import annotations

import re
import subprocess
import sys
import xml.etree.ElementTree as ElementTree

import matplotlib
import pytest
from PIL import Image

from meseta import figures
from meseta.errors import OutputError
from meseta.recipe.figure import FigureSettings

SVG = "{http://www.w3.org/2000/svg}"


@pytest.fixture
def figure(molecule):
    return figures.result_figure(*molecule, FigureSettings(), "wire M3")


def texts_of(svg: str) -> list[str]:
    root = ElementTree.fromstring(svg)
    return ["".join(element.itertext()) for element in root.iter(f"{SVG}text")]


def test_pdf_embeds_truetype_fonts(figure, tmp_path):
    path = tmp_path / "figure.pdf"
    figures.save_figure(figure, path)
    content = path.read_bytes()
    assert content.startswith(b"%PDF-")
    assert b"/FontFile2" in content  # PDF 1.7 (ISO 32000-1), table 126: an embedded TrueType program
    assert b"/Subtype /Type3" not in content
    names = re.findall(rb"/BaseFont /([A-Z]{6})\+([\w-]+)", content)
    assert {name for _, name in names} >= {b"Roboto-Regular"}


def test_svg_text_is_live_and_its_face_embedded(figure, tmp_path):
    path = tmp_path / "figure.svg"
    figures.save_figure(figure, path)
    svg = path.read_text(encoding="utf-8")
    texts = texts_of(svg)
    assert "Displacement (nm)" in texts
    assert "Conductance (G₀)" in texts
    assert any(text.startswith("4.0(2)") for text in texts)
    assert "src:url(data:font/ttf;base64," in svg
    assert not re.findall(r"(?:href|src)=\"(?!#|data:)", svg)


@pytest.mark.parametrize("suffix", ["pdf", "svg", "png"])
def test_same_figure_same_bytes(molecule, tmp_path, suffix):
    contents = []
    for name in ("one", "two"):
        path = tmp_path / f"{name}.{suffix}"
        figures.save_figure(figures.result_figure(*molecule, FigureSettings(), "M3"), path)
        contents.append(path.read_bytes())
    assert contents[0] == contents[1]
    assert not re.search(rb"CreationDate|ModDate|<dc:date>", contents[0])


@pytest.mark.parametrize("width_mm", [86.0, 178.0])
def test_png_has_the_size_asked_for(molecule, tmp_path, width_mm):
    path = tmp_path / "figure.png"
    figures.save_figure(figures.result_figure(*molecule, FigureSettings(width_mm=width_mm)), path)
    with Image.open(path) as image:
        assert image.width == pytest.approx(width_mm / 25.4 * 300, abs=1)
        assert image.info["dpi"][0] == pytest.approx(300, abs=0.1)


def test_users_own_parameters_play_no_part(molecule, tmp_path):
    plain, odd = tmp_path / "plain.png", tmp_path / "odd.png"
    figures.save_figure(figures.result_figure(*molecule, FigureSettings()), plain)
    before = dict(matplotlib.rcParams)
    with matplotlib.rc_context({"font.size": 30, "axes.grid": True, "lines.linewidth": 9, "svg.fonttype": "path"}):
        figures.save_figure(figures.result_figure(*molecule, FigureSettings()), odd)
    assert plain.read_bytes() == odd.read_bytes()
    assert dict(matplotlib.rcParams) == before


@pytest.mark.parametrize("name", ["figure.gif", "figure", "nowhere/figure.pdf"])
def test_bad_path_is_told(figure, tmp_path, name):
    with pytest.raises(OutputError):
        figures.save_figure(figure, tmp_path / name)


def test_pages_of_one_pdf(molecule, tmp_path):
    path = tmp_path / "pages.pdf"
    page = figures.result_figure(*molecule, FigureSettings())
    figures.save_pages([page, page], path)
    assert len(re.findall(rb"/Type /Page\b", path.read_bytes())) == 2


def test_inline_svg_keeps_its_identifiers_apart(figure):
    text = figures.svg_text(figure, "first")
    assert text.startswith("<svg")
    identifiers = re.findall(r'\bid="([^"]+)"', text)
    assert identifiers
    assert all(name.startswith("first-") for name in identifiers)
    used = set(re.findall(r'href="#([^"]+)"', text)) | set(re.findall(r"url\(#([^)]+)\)", text))
    assert used <= set(identifiers)


def test_no_pyplot():
    code = "import sys, meseta.figures; sys.exit('matplotlib.pyplot' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0
