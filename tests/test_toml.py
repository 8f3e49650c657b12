"""TOML tables that know their places."""

from __future__ import annotations

import datetime
from pathlib import Path

import pytest

from sta_prior.errors import InputError
from sta_prior.io.text import Table, read_toml

TEXT = """
title = "Stairs"
up = "y"
count = 3
share = 0.25
invented_data = true
when = 2024-05-01
empty = "  "
marks = ["TA", "TB"]
mixed = ["TA", 7]
cycles = [0.5, 2]

[segment.thigh]
markers = ["TA"]
[segment.thigh.frame]
origin = "HJC"

[[subject]]
id = "P01"
[[subject.trial]]
id = "a"
[[subject.trial]]
id = "b"
skin = 5
"""


@pytest.fixture
def top(tmp_path: Path) -> Table:
    path = tmp_path / "study.toml"
    path.write_text(TEXT, encoding="utf-8")
    return read_toml(path)


def refusal(function: object, *arguments: object, **named: object) -> str:
    assert callable(function)
    with pytest.raises(InputError) as caught:
        function(*arguments, **named)
    assert "\n" not in str(caught.value)
    return str(caught.value)


def test_values_of_each_type(top: Table) -> None:
    assert top.text("title") == "Stairs"
    assert top.number("count") == 3.0
    assert isinstance(top.number("count"), float)
    assert top.number("share", minimum=0, maximum=0.25) == 0.25
    assert top.flag("invented_data") is True
    assert top.texts("marks") == ["TA", "TB"]
    assert top.numbers("cycles") == [0.5, 2.0]
    assert top.choice("up", ("x", "y", "z")) == "y"
    assert dict(top.table("segment").table("thigh").table("frame")) == {"origin": "HJC"}
    assert [trial.text("id") for trial in top.tables("subject")[0].tables("trial")] == ["a", "b"]
    assert top["count"] == 3
    assert len(top.table("segment")) == 1
    assert "title" in top


def test_defaults_stand_in_for_what_is_absent(top: Table) -> None:
    assert top.text("no", None) is None
    assert top.number("no", 0.5) == 0.5
    assert top.flag("no", False) is False
    assert top.texts("no", ["a"]) == ["a"]
    assert top.numbers("no", None) is None
    assert top.choice("no", ("x", "y"), "x") == "x"
    assert top.tables("no", ()) == []
    inner = top.table("segment").table("shank", {"depth": "x"})
    assert refusal(inner.number, "depth") == (
        f"{top.path}, segment.shank.depth: expected a finite number, got a text, 'x'. Correct the value."
    )


def test_places_are_dotted_and_numbered_from_one(top: Table) -> None:
    trial = top.tables("subject")[0].tables("trial")[1]
    assert trial.place("skin") == (top.path, "subject[1].trial[2].skin")
    assert top.table("segment").table("thigh").place() == (top.path, "segment.thigh")
    assert top.place() == (top.path,)
    assert refusal(trial.text, "skin") == (
        f"{top.path}, subject[1].trial[2].skin: expected a text that is not blank, got a whole number, 5. "
        "Correct the value."
    )


@pytest.mark.parametrize(
    ("getter", "key", "expected"),
    [
        ("text", "empty", "expected a text that is not blank, got a text, '  '"),
        ("text", "share", "expected a text that is not blank, got a number, 0.25"),
        ("text", "marks", "expected a text that is not blank, got a list"),
        ("text", "segment", "expected a text that is not blank, got a table"),
        ("number", "title", "expected a finite number, got a text, 'Stairs'"),
        ("number", "invented_data", "expected a finite number, got true"),
        ("number", "when", "expected a finite number, got a date or time"),
        ("flag", "count", "expected true or false, got a whole number, 3"),
        ("texts", "title", "expected a list of texts, got a text, 'Stairs'"),
        ("numbers", "share", "expected a list of numbers, got a number, 0.25"),
        ("table", "share", "expected a table, got a number, 0.25"),
        ("tables", "segment", "expected an array of tables, [[segment]], got a table"),
        ("tables", "marks", "expected an array of tables, [[marks]], got a list"),
    ],
)
def test_a_value_of_another_type_is_named(top: Table, getter: str, key: str, expected: str) -> None:
    assert refusal(getattr(top, getter), key) == f"{top.path}, {key}: {expected}. Correct the value."


def test_the_item_of_a_list_is_named(top: Table) -> None:
    assert refusal(top.texts, "mixed") == (
        f"{top.path}, mixed[2]: expected a text that is not blank, got a whole number, 7. Correct the value."
    )
    assert refusal(top.numbers, "mixed") == (
        f"{top.path}, mixed[1]: expected a finite number, got a text, 'TA'. Correct the value."
    )


def test_limits_and_choices(top: Table) -> None:
    assert refusal(top.number, "count", minimum=4) == (
        f"{top.path}, count: expected at least 4, got 3. Correct the value."
    )
    assert refusal(top.number, "count", minimum=0, maximum=2.5) == (
        f"{top.path}, count: expected at least 0 and at most 2.5, got 3. Correct the value."
    )
    assert refusal(top.choice, "title", ("Stair", "Walk")) == (
        f"{top.path}, title: expected one of Stair, Walk, got 'Stairs'. Did you mean Stair?"
    )
    assert refusal(top.choice, "up", ("left", "right")) == (
        f"{top.path}, up: expected one of left, right, got 'y'. Choose one of them."
    )
    assert refusal(top.choice, "count", ("x", "y")) == (
        f"{top.path}, count: expected one of x, y, got a whole number, 3. Correct the value."
    )


@pytest.mark.parametrize("number", ["nan", "inf", "1" + 400 * "0"])
def test_numbers_that_no_float_holds_are_refused(tmp_path: Path, number: str) -> None:
    path = tmp_path / "a.toml"
    path.write_text(f"a = {number}")
    assert "expected a finite number, got a" in refusal(read_toml(path).number, "a")
    assert len(refusal(read_toml(path).number, "a")) < len(str(path)) + 120


def test_a_missing_key_is_named_with_the_nearest(top: Table) -> None:
    assert refusal(top.text, "titel") == (
        f"{top.path}, titel: missing, expected a text that is not blank. Did you mean title?"
    )
    assert refusal(top.table("segment").table, "zzz") == (
        f"{top.path}, segment.zzz: missing, expected a table. Add zzz = …."
    )


def test_an_unknown_key_is_refused_with_its_place_and_the_nearest(top: Table) -> None:
    thigh = top.table("segment").table("thigh")
    thigh.refuse_unknown(["markers", "frame"])
    assert refusal(thigh.refuse_unknown, ["marker", "frame"]) == (
        f"{top.path}, segment.thigh.markers: unknown key 'markers'. Did you mean marker?"
    )
    trial = top.tables("subject")[0].tables("trial")[1]
    assert refusal(trial.refuse_unknown, ["id", "bone"]) == (
        f"{top.path}, subject[1].trial[2].skin: unknown key 'skin'. Known here: id, bone."
    )


@pytest.mark.parametrize(
    ("text", "place", "wrong"),
    [
        ('a = 1\nb = "x\n', "line 2, column 7", "illegal character '\\n'"),
        ("a = 1\n\nb 2\n", "line 3, column 3", "expected '=' after a key in a key/value pair"),
        ("a = 1\na = 2\n", "line 2, column 6", "cannot overwrite a value"),
        ("a = [1,\n2", "line 2", "unclosed array"),
    ],
)
def test_text_that_is_not_toml_is_refused_with_its_line(
    tmp_path: Path, text: str, place: str, wrong: str
) -> None:
    path = tmp_path / "a.toml"
    path.write_text(text)
    assert refusal(read_toml, path) == f"{path}, {place}: not TOML ({wrong}). Correct the line."


def test_foreign_files_are_refused(tmp_path: Path) -> None:
    path = tmp_path / "a.toml"
    assert refusal(read_toml, path) == f"{path}: no such file. Check the name and the folder."
    path.write_bytes(b"")
    assert refusal(read_toml, path) == f"{path}: the file is empty. Export or copy it again."
    path.write_bytes(b"\x89PNG\r\n")
    assert refusal(read_toml, path) == f"{path}, line 1: not UTF-8 text. Save the file as UTF-8 text."
    path.write_text("a = " + "[" * 20000)
    assert refusal(read_toml, path) == f"{path}: not TOML (nested too deeply). Flatten it."


def test_dates_are_kept_as_they_are(top: Table) -> None:
    assert top["when"] == datetime.date(2024, 5, 1)
