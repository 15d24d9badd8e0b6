"""Metadata from the command line: rules, parts and reports by what file names say."""

from __future__ import annotations

import csv
import json

from test_command_bad_calls import meseta

FEW = ("--set", "resampling.replicates=20", "--set", "correlation.permutations=0")
ROWS = "".join(f"{0.01 * n:.2f},{30000 - 200 * n}\n" for n in range(150))


def test_rules_and_parts_by_metadata_and_a_preset_leaves_how_a_study_is_read(tmp_path):
    (tmp_path / "night").mkdir()
    for n, bias in enumerate((50, 100, 100, 200)):
        (tmp_path / "night" / f"tip_{bias}mV_{n}.csv").write_text(f"# pull {n}\ndisplacement_nm,current_nA\n{ROWS}")
    settings = ("--set", "intake.name_template={kind}_{bias_mV}mV_{n}.csv", "--set", "intake.specimen=wire_3")
    study, result = tmp_path / "study.h5", tmp_path / "out"
    done = meseta("gather", tmp_path / "night", "--into", study, *settings)
    assert done.returncode == 0, done.stderr
    rules = ("--set", 'selection.rules=["bias_volt in 0.09..0.11", "n >= 2"]')
    done = meseta("run", study, "--out", result, "--preset", "metal", *rules, *FEW)
    assert done.returncode == 0, done.stderr
    with (result / "traces.csv").open(encoding="utf-8") as file:
        rows = list(csv.DictReader(file))
    assert [row["kept"] for row in rows] == ["false", "false", "true", "false"]
    assert {row["specimen"] for row in rows} == {"wire_3"}
    summary = json.loads((result / "summary.json").read_text(encoding="utf-8"))
    assert summary["notes"]["calibration"]["bias_volt"]["value"] == [0.05, 0.2]
    report = (result / "report.html").read_text(encoding="utf-8")
    assert "{kind}_{bias_mV}mV_{n}.csv" in report and "wire_3" in report
    done = meseta("compare", study, "--by", "bias_volt", *FEW)
    assert [line.split(":")[0] for line in done.stdout.splitlines()[:3]] == ["0.05", "0.1", "0.2"]


def test_a_run_says_what_was_assumed(tmp_path):
    (tmp_path / "tip_100mV.csv").write_text("displacement_nm,current_nA\n" + ROWS)
    (tmp_path / "tip_100mV.json").write_text('{"bias": "0.2 V"}')
    template = ("--set", "intake.name_template={tip}_{bias_mV}mV.csv")
    done = meseta("run", tmp_path / "tip_100mV.csv", "--out", tmp_path / "out", *template, *FEW)
    assert done.returncode == 0, done.stderr
    assert "bias_volt is 0.2 by the file of metadata beside it and 0.1 by its name" in done.stdout + done.stderr
