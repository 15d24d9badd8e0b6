"""Report, summary, methods: numbers of the tables with one rounding, every setting stated, every text escaped."""

from __future__ import annotations

import json
from dataclasses import replace
from html.parser import HTMLParser

import numpy as np
import pytest
from figure_fakes import make_table

from meseta import figures, typeset
from meseta.analysis import Analysis
from meseta.errors import InputError
from meseta.figures import rows
from meseta.figures.methods import METHOD_SOURCES, methods_paragraphs
from meseta.recipe import Recipe


class Page(HTMLParser):
    """Collects text, tags and addresses of a page."""

    VOID = frozenset({"meta", "br", "link", "img", "input", "hr", "col"})

    def __init__(self, text):
        super().__init__()
        self.tags, self.addresses, self.words, self.open = [], [], [], []
        self.feed(text)
        self.close()

    def handle_starttag(self, tag, attrs):
        self.tags.append(tag)
        self.addresses += [value for name, value in attrs if name in ("href", "src", "xlink:href", "action")]
        if tag not in self.VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag, attrs):
        self.tags.append(tag)
        self.addresses += [value for name, value in attrs if name in ("href", "src", "xlink:href", "action")]

    def handle_endtag(self, tag):
        assert self.open
        assert self.open.pop() == tag

    def handle_data(self, data):
        self.words.append(data)

    @property
    def text(self):
        return " ".join(" ".join(self.words).split())


@pytest.fixture(scope="module")
def summary(analysis):
    return figures.summary(analysis)


@pytest.fixture(scope="module")
def page(analysis, summary):
    return figures.report(analysis, summary, "wire M3, night 14")


def squeezed(text):
    return " ".join(text.split())


def test_summary_is_plain_json(summary):
    assert json.loads(json.dumps(summary, allow_nan=False)) == summary
    assert summary["versions"]["meseta_version"]
    assert len(summary["inputs"][0]["sha256"]) == 64
    assert summary["recipe"] == Recipe.build(summary["recipe"]).model_dump(mode="json")


def test_summary_accounts_for_every_trace_and_sample(analysis, summary):
    traces, histogram = summary["traces"], summary["histogram"]
    assert traces["read"] == analysis.traces.traces == 160
    assert traces["kept"] + traces["dropped"] == traces["read"]
    assert sum(traces["reasons"].values()) == traces["dropped"]
    assert histogram["samples"] + sum(histogram["excluded"].values()) == analysis.traces.samples


def test_summary_has_the_rows_of_peaks_csv(analysis, summary):
    table = analysis.result("peaks").table
    assert len(summary["peaks"]) == len(table)
    for row, entry in enumerate(summary["peaks"]):
        assert set(entry) == set(table.columns())
        if np.isfinite(table.position_g0[row]):
            assert entry["position_g0"] == table.position_g0[row]


def test_dropped_traces_have_reasons(analysis):
    strict = analysis.with_recipe(analysis.recipe.with_values("selection", rules=["plateaus >= 4"]))
    summary = figures.summary(strict)
    assert summary["traces"]["dropped"] == summary["traces"]["reasons"].get("plateaus >= 4") > 0
    text = Page(figures.report(strict, summary)).text
    assert "plateaus >= 4" in text
    assert f"{typeset.integer(summary['traces']['dropped'])} dropped" in squeezed(text)


def test_bad_files_are_listed_in_summary_report_and_warnings(analysis):
    bad = [InputError("is not HDF5", "night/<b>7</b>.h5", "export it again")]
    summary = figures.summary(analysis, bad)
    assert summary["bad_files"] == [{"what": "is not HDF5", "where": "night/<b>7</b>.h5", "remedy": "export it again"}]
    assert any("could not be read" in text for text in summary["warnings"])
    page = figures.report(analysis, summary)
    assert "night/&lt;b&gt;7&lt;/b&gt;.h5" in page
    assert "<b>7</b>" not in page


def test_report_is_well_formed_and_self_contained(page):
    parsed = Page(page)
    assert parsed.open == []
    assert "script" not in parsed.tags
    assert parsed.tags.count("svg") == 4
    assert all(address.startswith(("#", "data:")) for address in parsed.addresses)
    assert "url(http" not in page
    assert "@import" not in page


def test_identifiers_are_unique(page):
    import re

    names = re.findall(r'\bid="([^"]+)"', page)
    assert len(names) == len(set(names))


def test_report_has_the_numbers_of_the_tables(analysis, page):
    text = squeezed(Page(page).text)
    fit = analysis.result("peaks")
    for row in [*rows.peak_rows(fit.table), *rows.quoted_rows(fit.table)]:
        for value in row.values():
            assert squeezed(value) in text
    for name, moved in rows.systematic_rows(fit):
        assert name in text
        assert all(squeezed(value) in text for value in moved)


def test_report_and_figure_round_alike(analysis, page):
    table = analysis.result("peaks").table
    assert np.isfinite(table.position_g0[0])
    position = typeset.value_with_uncertainty(
        table.position_g0[0], table.position_low_g0[0], table.position_high_g0[0], "G0"
    )
    assert rows.peak_rows(table)[0]["position"] == position
    assert squeezed(Page(page).text).count(squeezed(position)) >= 3  # figure, peak table, table of the three numbers


def test_report_states_every_setting_with_its_default(analysis, page):
    text = squeezed(Page(page).text)
    for section, _, entries in rows.setting_rows(analysis.recipe):
        for entry in entries:
            assert entry["name"].startswith(section)
            assert entry["name"] in text
            assert squeezed(entry["value"]) in text


def test_report_is_the_same_each_time(analysis, summary, page):
    assert figures.report(analysis, summary, "wire M3, night 14") == page


def test_hostile_names_are_escaped(analysis):
    nasty = '<script>alert("x")</script>&.csv'
    source = replace(
        analysis.traces.sources[0], name=nasty, layout="<img src=x onerror=y>", reader="'\"><svg onload=z>"
    )
    hostile = Analysis(replace(analysis.traces, sources=(source,), notes={"<i>k</i>": nasty}), analysis.recipe)
    page = figures.report(hostile, figures.summary(hostile), nasty)
    for raw in ("<script", "<img", "<svg onload", "<i>k"):
        assert raw not in page
    assert page.count("&lt;script&gt;") >= 3  # heading, file table, title in the figure
    assert Page(page).open == []


def test_methods_state_every_setting_that_has_a_value(analysis):
    from meseta.figures import stated as stated_module

    seen = set()

    class Watched(stated_module.Stated):
        def value(self, name):
            seen.add(name)
            return super().value(name)

    import meseta.figures.methods as methods

    original = methods.Stated
    methods.Stated = Watched
    try:
        methods_paragraphs(analysis)
    finally:
        methods.Stated = original
    by_other_words = {
        # stated through the results they lead to
        *(f"histogram.{name}" for name in ("bins_per_decade", "bin_width_g0", "low_g0", "high_g0")),
        *(f"peaks.{name}" for name in ("axis", "fit_low_g0", "fit_high_g0")),
    }
    for name, section in analysis.recipe.sections():
        for info in section.fields():
            value = getattr(section, info.name)
            if name not in ("figure", "study") and value not in (None, [], {}, ()):
                assert f"{name}.{info.name}" in seen | by_other_words


def test_methods_follow_the_recipe(analysis):
    other = analysis.with_recipe(
        analysis.recipe.with_values("peaks", shape="lorentzian", background="linear").with_values(
            "alignment", zero_at_g0=0.3
        )
    )
    text = figures.methods_statement(other)
    assert "Lorentzian peaks on a linear background" in text
    assert "crossing of 0.3 G₀" in squeezed(text)
    assert text != figures.methods_statement(analysis)
    assert all(source in text for source in METHOD_SOURCES)


def test_methods_read_as_prose(analysis):
    for heading, text in methods_paragraphs(analysis):
        assert heading[0].isupper()
        assert text.endswith((".", ")"))
        for word in ("None", "nan", "{", "}", "_", ".."):
            assert word not in text.replace("I_offset", "").replace("V_offset", ""), heading


def test_few_traces_are_warned_of(summary):
    assert any("fewer than 500" in text for text in summary["warnings"])


def test_no_trace_left_is_said(analysis):
    none = analysis.with_recipe(analysis.recipe.with_values("selection", rules=["plateaus >= 900"]))
    summary = figures.summary(none)
    assert summary["traces"]["kept"] == 0
    assert any("No trace takes part" in text for text in summary["warnings"])
    page = Page(figures.report(none, summary))
    assert page.open == []
    assert "no trace takes part" in page.text


def test_systematic_rows_are_signed(metal):
    (first, second) = rows.systematic_rows(metal[2])
    assert first[1][0].startswith("+")
    assert second[1][0].startswith(typeset.MINUS)


def test_missing_numbers_are_dashes(metal):
    table = make_table(metal[2].grid, [np.nan], [np.nan], [np.nan], status=["no peak"])
    row = rows.peak_rows(table)[0]
    assert row["position"] == "–"
    assert row["systematic"] == "–"
