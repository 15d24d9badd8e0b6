"""The help pages name everything that there is."""

import h5py
from study_samples import rich_traces

from meseta.analysis import Analysis
from meseta.resources import resource
from meseta.selection import QUANTITIES, parse_rule
from meseta.study import write_study
from meseta.study.files import SCHEMA


def test_the_page_on_studies_names_every_item_of_the_schema(tmp_path):
    page = resource("help", "study.md").read_text(encoding="utf-8")
    analysis = Analysis(rich_traces())
    write_study(tmp_path / "s.h5", analysis)
    missing = []
    with h5py.File(tmp_path / "s.h5") as root:

        def look(name, item):
            last = name.rpartition("/")[2].removesuffix("_checksums")
            if (
                not name.startswith(("traces/channels/", "traces/table/note", "traces/table/good"))
                and f"{last}" not in page
            ):
                missing.append(name)
            missing.extend(f"{name}@{key}" for key in item.attrs if f"`{key}`" not in page)

        root.visititems(look)
        missing += [key for key in root.attrs if f"`{key}`" not in page]
    assert missing == []
    assert f"## Schema {SCHEMA}, field by field" in page


def test_the_page_on_rules_names_every_quantity_and_its_examples_are_rules():
    page = resource("help", "rules.md").read_text(encoding="utf-8")
    assert [name for name in QUANTITIES if f"`{name}" not in page] == []
    block = page.split("rules = [")[1].split("]\n\n")[0]
    for line in block.strip().splitlines():
        parse_rule(line.strip().rstrip(",").strip()[1:-1])
