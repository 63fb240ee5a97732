from __future__ import annotations

import math
import time
from collections.abc import Callable

import pytest

from condyle.model.reading import MOST_VALUES, read_text
from condyle.model.tree import Mistakes, node_at, plain


def values_of(text: str) -> object:
    mistakes = Mistakes()
    tree = read_text(text, "a.yaml", mistakes)
    mistakes.raise_if_any()
    assert tree is not None
    return plain(tree)


# YAML 1.2.2 (https://yaml.org/spec/1.2.2/), example 10.8 and the tables of sections 10.2 and 10.3.
@pytest.mark.parametrize(
    ("written", "meant"),
    [
        ("null", None), ("~", None), ("", None), ("true", True), ("False", False),
        ("0", 0), ("0o7", 7), ("0x3A", 58), ("-19", -19), ("+12", 12), ("012", 12),
        ("0.", 0.0), ("-0.0", -0.0), (".5", 0.5), ("+12e03", 12000.0), ("-2E+05", -200000.0),
        (".inf", math.inf), ("-.Inf", -math.inf), ("+.INF", math.inf),
        ("on", "on"), ("yes", "yes"), ("y", "y"), ("No", "No"), ("1_000", "1_000"),
        ("1:30", "1:30"), ("2024-01-31", "2024-01-31"), ("'12'", "12"), ('"true"', "true"),
        ("!!str 12", "12"), ("-x", "-x"), ("<<", "<<"),
    ],
)  # fmt: skip
def test_a_scalar_means_what_yaml_1_2_says(written: str, meant: object) -> None:
    found = values_of(f"a: {written}\n")
    assert found == {"a": meant}
    assert type(found["a"]) is type(meant)  # type: ignore[index]


def test_a_scalar_may_be_not_a_number() -> None:
    assert math.isnan(values_of("a: .nan")["a"])  # type: ignore[index]


def test_every_key_and_value_knows_its_line() -> None:
    tree = read_text("a:\n  b:\n    [1,\n     2]\n  c: &x {d: 3}\ne: *x\n", "a.yaml", Mistakes())
    assert tree is not None
    b = node_at(tree, "a", "b")
    assert (b.key_line, b.line) == (2, 3)
    assert node_at(tree, "a", "b", 1).line == 4
    assert node_at(tree, "e").key_line == 6
    assert node_at(tree, "e", "d").line == 5


@pytest.mark.parametrize(
    ("content", "told"),
    [
        (b"", "1: the file holds nothing."),
        (b"# only a comment\n", "1: the file holds nothing."),
        (b"[]", "1: this is not a model but a list."),
        (b"leg", "1: this is not a model but a single value."),
        (b"condyle: 1\nname: \xff\n", "2: this is not text in UTF-8."),
        (b"condyle: 1\nname: a\x00\n", "2: the character U+0000 has no place in text."),
        (b"condyle: 1\nname: [a\n", "3: this is not YAML: expected ',' or ']', but got '<stream end>'."),
        (b"condyle: 1\nname: \"\\q\"\n", "2: this is not YAML: found unknown escape character 'q'."),
        (b"condyle: 1\n\tname: leg\n", "2: this is not YAML: found character '\\t' that cannot start any token."),
        (b"condyle: 1\n---\ncondyle: 1\n", "2: a second document begins here."),
        (b"condyle: 1\n? [a]\n: 1\n", "2: a key is a list, a mapping or an alias."),
        (b"condyle: 1\nname: &a [*a]\n", "2: '*a' stands within the value it names."),
        (b"x: " + b"[" * 100_000, "1: more than 40 lists or mappings within each other."),
        (b"x" * 10_000_001, "1: more than 10 MB."),
    ],
)  # fmt: skip
def test_text_that_is_no_model_is_told_at_its_line(
    report: Callable[..., str], content: bytes, told: str
) -> None:
    assert report(content).splitlines()[0] == f"leg.yaml:{told}"


def test_anchors_that_explode_are_stopped_before_they_do(report: Callable[..., str]) -> None:
    lines = ["condyle: 1", "a0: &a0 [1, 1, 1, 1, 1, 1, 1, 1, 1, 1]"]
    lines += [f"a{i + 1}: &a{i + 1} [{', '.join([f'*a{i}'] * 10)}]" for i in range(9)]
    began = time.process_time()
    told = report("\n".join(lines)).splitlines()[0]
    assert (
        told == f"leg.yaml:6: more than {MOST_VALUES} values, those that aliases repeat included."
    )
    assert time.process_time() - began < 2


def test_a_file_that_is_not_there_is_told(report: Callable[..., str]) -> None:
    from condyle.model import load_skeleton
    from condyle.model.errors import ModelError

    with pytest.raises(ModelError, match=r"^no/leg.yaml:1: there is no such file"):
        load_skeleton("no/leg.yaml")
    with pytest.raises(
        ModelError, match=r"^lower_limb:1: no shipped model .*\n.*mean 'lower_limbs'"
    ):
        load_skeleton("lower_limb")


def test_a_byte_order_mark_and_windows_line_ends_are_fine(
    read: Callable[..., object], leg: str
) -> None:
    windows = b"\xef\xbb\xbf" + leg.replace("\n", "\r\n").encode()
    assert read(windows) == read(leg)


def test_an_alias_is_a_copy(read: Callable[..., object], leg: str) -> None:
    anchored = leg.replace("centre_of_mass: [0, -0.18, 0]", "centre_of_mass: &c [0, -0.18, 0]")
    aliased = anchored.replace("shank: {}", "shank: {centre_of_mass: *c}")
    written = leg.replace("shank: {}", "shank: {centre_of_mass: [0, -0.18, 0]}")
    assert read(aliased) == read(written)


def test_every_mistake_is_in_one_report(report: Callable[..., str], leg: str) -> None:
    wrong = leg.replace("mass: 9.8", "mas: 9.8").replace("from: thigh", "from: tigh")
    wrong = wrong.replace("rest: 5", "rest: 500").replace("at: ASIS}", "at: ASIS, sd: 0}")
    wrong += "  thigh_a: {segment: thigh}\n"
    places = [line.split(":")[1] for line in report(wrong).splitlines() if line[0] != " "]
    assert places == ["9", "21", "23", "33", "36"]


def test_the_mistakes_of_a_long_model_come_in_well_under_a_second(
    report: Callable[..., str], leg: str
) -> None:
    marker = "  m{0}: {{segment: thih, at: [0, 0, {0}], sdd: 1}}\n"
    wrong = leg + "".join(marker.format(number) for number in range(470))
    began = time.process_time()
    told = report(wrong)
    assert time.process_time() - began < 1.5  # of the processor; 0.3 s when measured alone
    assert told.count("leg.yaml:") == 501
    assert "and 440 more mistakes" in told
