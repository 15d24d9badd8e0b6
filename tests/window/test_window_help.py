"""Every step and every view has a page in the help, and every link in a page leads to one."""

from __future__ import annotations

import re

import pytest
from PySide6.QtCore import QUrl

from meseta.recipe import Recipe
from meseta.window.help import help_pages
from meseta.window.views import VIEWS


def test_every_step_and_every_view_has_a_page():
    wanted = set(Recipe.model_fields) | {view.help_page for view in VIEWS}
    assert wanted <= set(help_pages())


@pytest.mark.parametrize("name", sorted(help_pages()))
def test_links_lead_to_pages_and_pages_have_a_title(name):
    text = help_pages()[name].read_text(encoding="utf-8")
    assert text.startswith("# ")
    links = [link for link in re.findall(r"\]\(([^)]+)\)", text) if not link.startswith("http")]
    assert {link.partition(".md")[0] for link in links} <= set(help_pages())


def test_no_two_pages_have_one_title_and_the_list_is_in_order(make):
    window = make()
    window.show_help("window")
    titles = [window.help.list.item(row).text() for row in range(window.help.list.count())]
    assert len(set(titles)) == len(titles) == len(help_pages())
    assert titles == sorted(titles, key=str.casefold)
    window.help.close()


def test_a_page_is_shown_and_its_link_followed(make):
    window = make()
    window.show_help("window")
    assert "Three plots" in window.help.page.toPlainText()
    window.help._follow(QUrl("conditions.md"))
    assert "becomes a condition" in window.help.page.toPlainText()
    window.run_action("keys")
    assert "Reject this trace" in window.help.page.toPlainText()
    assert window.help.list.currentRow() == -1, "the sheet of keys is none of the pages"
    assert window.help.focusWidget() is window.help.page, "a list that gets the focus would choose its first page"
    window.help.close()
