"""Files: by name, by path, and everything that can be wrong before a table is looked at."""

from __future__ import annotations

import errno
from pathlib import Path

import pytest

from breakstep.errors import ScenarioError
from breakstep.scenario import find as finding
from breakstep.scenario.find import find, library, parse, shipped
from breakstep.scenario.load import load_scenario


def refused(call: object, *args: object) -> str:
    with pytest.raises(ScenarioError) as caught:
        call(*args)  # type: ignore[operator]
    assert caught.value.details["faults"] == caught.value.message.split("\n")
    return caught.value.message


def test_a_name_finds_a_shipped_scenario() -> None:
    assert find("shock_tube") == library() / "shock_tube.toml"


def test_a_path_finds_a_file(tmp_path: Path) -> None:
    file = tmp_path / "mine.toml"
    file.write_text("")
    assert find(str(file)) == file


def test_an_unknown_name_suggests_one() -> None:
    assert "did you mean shock_tube?" in refused(find, "shocktube")


def test_a_hopeless_name_lists_them_all() -> None:
    message = refused(find, "xyzzy")
    assert all(name in message for name in shipped())


def test_a_path_to_nothing(tmp_path: Path) -> None:
    assert refused(find, f"{tmp_path}/no.toml").endswith("no.toml: there is no such file")


def test_a_folder(tmp_path: Path) -> None:
    assert "is a folder; expected a scenario file" in refused(find, f"{tmp_path}/")


def test_a_file_that_may_not_be_read(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def denied(_: Path) -> bytes:  # root may read everything, so the system's answer is played
        raise PermissionError(errno.EACCES, "Permission denied")

    monkeypatch.setattr(Path, "read_bytes", denied)
    assert "a.toml: cannot be read: Permission denied" in refused(parse, tmp_path / "a.toml")


def test_a_file_that_vanishes(tmp_path: Path) -> None:
    assert "cannot be read: No such file" in refused(parse, tmp_path / "gone.toml")


def test_what_is_not_toml_is_named_by_line(tmp_path: Path) -> None:
    file = tmp_path / "a.toml"
    file.write_text("name = 'a'\nmesh = \n")
    assert "a.toml: line 2, column 8: expected TOML, but: invalid value" in refused(parse, file)


def test_a_file_that_ends_too_early(tmp_path: Path) -> None:
    file = tmp_path / "a.toml"
    file.write_text("name = [1,")
    assert "expected TOML" in refused(parse, file)


def test_a_key_twice(tmp_path: Path) -> None:
    file = tmp_path / "a.toml"
    file.write_text("[mesh]\n[mesh]\n")
    assert "line 2" in refused(parse, file)


def test_what_is_not_utf_8(tmp_path: Path) -> None:
    file = tmp_path / "a.toml"
    file.write_bytes(b"name = '\xff'")
    assert "expected UTF-8 text, came byte 0xff at 8" in refused(parse, file)


def test_brackets_without_end(tmp_path: Path) -> None:
    file = tmp_path / "a.toml"
    file.write_text("x = " + "[" * 20_000)
    assert "expected TOML" in refused(parse, file)


def test_an_integer_of_thousands_of_digits(tmp_path: Path) -> None:
    file = tmp_path / "a.toml"
    file.write_text("x = " + "1" * 5000)
    assert "expected TOML, but: Exceeds the limit" in refused(parse, file)


def test_a_byte_order_mark_is_no_fault(tmp_path: Path) -> None:
    file = tmp_path / "a.toml"
    file.write_bytes(b"\xef\xbb\xbfname = 'a'")
    assert parse(file) == {"name": "a"}


def test_faults_name_the_file(tmp_path: Path) -> None:
    file = tmp_path / "mine.toml"
    file.write_text("name = 'a'\n")
    assert refused(load_scenario, file).startswith("mine.toml: mesh: is missing")


def test_a_wheel_holds_its_scenarios_beside_the_module(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    (tmp_path / "library").mkdir()
    (tmp_path / "library" / "packed.toml").write_text("")
    monkeypatch.setattr(finding, "__file__", str(tmp_path / "find.py"))
    assert list(shipped()) == ["packed"]
