"""Every section of the recipe and every file and column of a result is documented; links between pages hold."""

from __future__ import annotations

import re
from dataclasses import fields

import pytest

from meseta.histograms import HistogramTable
from meseta.peaks import PeakTable
from meseta.recipe import Recipe
from meseta.resources import resource
from meseta.run import RESULT_FILES, displacement_arrays, length_columns, trace_columns
from meseta.segmentation import PlateauTable

PAGES = sorted(resource("help").glob("*.md"))


def page(name):
    return resource("help", f"{name}.md").read_text(encoding="utf-8")


def section(text, heading):
    """Return the part of a page under a heading."""
    return re.split(r"^## ", text, flags=re.MULTILINE)[
        [part.split("\n")[0].strip() for part in re.split(r"^## ", text, flags=re.MULTILINE)].index(heading)
    ]


def quoted(text):
    return set(re.findall(r"`([^`\n]+)`", text))


@pytest.mark.parametrize("name", [name for name, _ in Recipe().sections()])
def test_every_section_of_the_recipe_is_explained(name):
    assert f"`[{name}]`" in page("recipe")


def test_every_file_of_a_result_is_described():
    assert set(RESULT_FILES) <= quoted(page("results").split("## ")[0])


@pytest.mark.parametrize(
    ("file", "table"),
    [("plateaus.csv", PlateauTable), ("histogram.csv", HistogramTable), ("peaks.csv", PeakTable)],
)
def test_every_column_is_described(file, table):
    described = quoted(section(page("results"), file))
    assert {field.name for field in fields(table)} <= described


def test_every_column_of_traces_is_described(analysis):
    own = {"labels", "simulated"}
    columns = {name for name in trace_columns(analysis) if name not in analysis.traces.table or name in STANDARD}
    assert columns - own <= quoted(section(page("results"), "traces.csv"))


def test_every_column_of_lengths_is_described(analysis):
    assert set(length_columns(analysis)) <= quoted(section(page("results"), "lengths.csv"))


STANDARD = {
    "source",
    "dataset",
    "record_start",
    "direction",
    "specimen",
    "session",
    "time_second",
    "sample_interval_second",
    "bias_volt",
    "partner",
}


def test_arrays_of_the_2d_histogram_are_described(analysis):
    arrays = displacement_arrays(analysis.result("displacement_histogram"))
    assert set(arrays) <= quoted(section(page("results"), "histogram2d.npz"))


def test_every_key_of_the_summary_is_described(analysis):
    from meseta import figures

    assert set(figures.summary(analysis)) <= quoted(section(page("results"), "summary.json"))


@pytest.mark.parametrize("path", PAGES, ids=lambda path: path.stem)
def test_pages_have_a_heading_and_links_that_hold(path):
    text = path.read_text(encoding="utf-8")
    assert text.startswith("# ")
    for target in re.findall(r"\]\(([^)#:]+\.md)\)", text):
        assert (path.parent / target).is_file(), target


@pytest.mark.parametrize("path", PAGES, ids=lambda path: path.stem)
def test_settings_named_in_pages_exist(path):
    sections = dict(Recipe().sections())
    known = {name: {info.name for info in part.fields()} for name, part in sections.items()}
    for name in quoted(path.read_text(encoding="utf-8")):
        match = re.fullmatch(r"(\w+)\.(\w+)(?: ?=.*)?", name)
        if match and match[1] in known and match[2] not in ("csv", "npz", "json", "toml", "h5", "pdf", "svg", "png"):
            assert match[2] in known[match[1]], name
