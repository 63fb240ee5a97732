"""`condyle report` and `condyle figures`: what they write, what they say, what they refuse."""

from __future__ import annotations

import json
import sys
from pathlib import Path

import pytest
from typer.testing import CliRunner

from condyle.cli import app
from condyle.provenance import file_hash
from condyle.reporting import figures, read_trial, report
from condyle.solver.results import FittedMotion

sys.path.insert(0, str(Path(__file__).parent))
from page_trials import write_trial

MODEL = """\
condyle: 1
name: a leg
segments: {thigh_right: {}}
joints:
  hip_right:
    from: laboratory
    to: thigh_right
    moves: [{rotate: z, coordinate: hip_flexion_right, range: [-30, 120]}]
markers: {front: {segment: thigh_right, at: [0.1, -0.2, 0]}}
"""


@pytest.fixture
def study(leg: FittedMotion, tmp_path: Path) -> Path:
    for name in ("first", "second"):
        write_trial(tmp_path / "study" / name, leg)
    return tmp_path / "study"


def test_a_study_gets_a_page_for_each_trial_and_an_index_that_leads_there(study: Path) -> None:
    made = report(study)
    assert [p.relative_to(study).as_posix() for p in made.pages] == [
        "first/report.html", "second/report.html",
    ]  # fmt: skip
    assert made.to_open == made.index == study / "index.html"
    assert 'href="first/report.html"' in made.index.read_text(encoding="utf-8")
    assert 'href="../index.html"' in made.pages[0].read_text(encoding="utf-8")


def test_one_trial_gets_one_page_and_no_index(study: Path) -> None:
    made = report(study / "first")
    assert made.to_open == study / "first" / "report.html"
    assert not (study / "index.html").exists()
    assert "All trials" not in made.to_open.read_text(encoding="utf-8")


def test_a_subject_that_is_gone_costs_the_limits_and_a_remark(study: Path) -> None:
    made = report(study / "first")
    assert "limits are not drawn" in made.remarks[0]


def test_limits_come_from_the_subject_beside_the_results(study: Path) -> None:
    (study.parent / "subject.yaml").write_text(MODEL)
    fit = study / "first" / "fit.json"
    content = json.loads(fit.read_text())
    content["subject"]["sha256"] = file_hash(study.parent / "subject.yaml")
    fit.write_text(json.dumps(content))
    trial, remarks = read_trial(study / "first", None)
    assert remarks == []
    assert (trial.columns[0].lower, trial.columns[0].upper) == pytest.approx((-30.0, 120.0))


def test_the_command_names_the_page_to_open(study: Path) -> None:
    done = CliRunner().invoke(app, ["report", str(study)])
    assert done.exit_code == 0, done.output
    assert f"open {study / 'index.html'} in a browser" in done.output.replace("\n", " ")


def test_figures_are_written_in_the_kinds_asked_for(study: Path) -> None:
    made = figures(study / "first", kinds=("svg", "pdf"))
    assert {path.suffix for path in made.files} == {".svg", ".pdf"}
    assert all(path.stat().st_size for path in made.files)
    assert (study / "first" / "figures" / "error_map.svg") in made.files


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (["report", "{}"], "no solved trial is there"),
        (["figures", "{}"], "no solved trial is there"),
        (["figures", "{}", "--kind", "bmp"], "The kinds: png, svg, pdf."),
    ],
)
def test_what_cannot_be_done_is_refused_in_words(
    tmp_path: Path, arguments: list[str], said: str
) -> None:
    done = CliRunner().invoke(app, [a.format(tmp_path) for a in arguments])
    assert done.exit_code == 2
    assert said in done.stderr
    assert list(tmp_path.iterdir()) == []


def test_a_damaged_folder_is_named(study: Path) -> None:
    (study / "first" / "fit.json").write_text("{")
    done = CliRunner().invoke(app, ["report", str(study / "first")])
    assert done.exit_code == 2
    assert "damaged" in done.stderr
