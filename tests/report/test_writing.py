"""Saving: the whole file or nothing."""

import os
import stat
import sys

import pytest

from evidence.complaints import DataError, DeclarationError
from evidence.report import writing
from evidence.report.json_form import read_record
from tests.records import make_candidate, make_record

KNOWN = r"one of \.html, \.json, \.csv, \.tex, \.md, \.png, \.svg; got"


@pytest.mark.parametrize(
    ("name", "beginning"),
    [
        ("r.html", "<!DOCTYPE html>"),
        ("r.json", "{"),
        ("r.csv", "candidate,"),
        ("r.tex", r"\documentclass"),
        ("r.md", "# Litter"),
        ("r.png", "\x89PNG"),
        ("r.svg", "<?xml"),
        ("R.JSON", "{"),
    ],
)
def test_the_suffix_names_the_form(tmp_path, name, beginning):
    writing.save(make_record(), tmp_path / name)
    assert (tmp_path / name).read_bytes().startswith(beginning.encode("latin-1"))
    assert os.listdir(tmp_path) == [name]


@pytest.mark.parametrize("suffix", [".html", ".png", ".svg"])
def test_pictures_without_matplotlib_are_refused_before_the_calculation(monkeypatch, suffix):
    monkeypatch.setattr(writing.importlib.util, "find_spec", lambda _: None)
    monkeypatch.setitem(sys.modules, "matplotlib", None)
    with pytest.raises(ImportError, match=r"pip install 'laplace-model-evidence\[report\]'"):
        writing.check_suffix(f"r{suffix}")
    assert writing.check_suffix("r.json") == ".json"


def test_which_forms_show_pictures():
    assert writing.show_pictures(["a.csv", "b.HTML"])
    assert not writing.show_pictures(["a.csv", "b.png"])


def test_what_is_saved_can_be_read(tmp_path):
    writing.save(make_record(), tmp_path / "r.json")
    assert read_record(tmp_path / "r.json")["leader"] == "one pool"


@pytest.mark.parametrize("name", ["r.xlsx", "r", "r.jsn", ".json"])
def test_an_unknown_suffix_lists_the_known_ones(tmp_path, name):
    with pytest.raises(DeclarationError, match=KNOWN):
        writing.save(make_record(), tmp_path / name)
    assert os.listdir(tmp_path) == []


@pytest.mark.parametrize(
    ("path", "said"),
    [
        ("missing/r.json", "there is no folder"),
        ("folder.json", "it is a folder"),
        ("null\0.json", "null"),
        ("x" * 300 + ".json", "[Ff]ile name too long"),
    ],
)
def test_a_path_that_cannot_be_written(tmp_path, path, said):
    (tmp_path / "folder.json").mkdir()
    for attempt in (writing.check_writable, lambda p: writing.save(make_record(), p)):
        with pytest.raises(DataError, match=f"cannot be written: .*{said}"):
            attempt(tmp_path / path)
    assert os.listdir(tmp_path) == ["folder.json"]


def test_a_write_protected_file_is_left_alone(tmp_path, monkeypatch):
    target = tmp_path / "r.csv"
    target.write_text("mine")
    monkeypatch.setattr(writing.os, "access", lambda *_: False)
    with pytest.raises(DataError, match="it is write-protected"):
        writing.save(make_record(), target)
    assert target.read_text() == "mine"


def test_trying_out_writes_nothing(tmp_path):
    (tmp_path / "r.json").write_text("mine")
    writing.check_writable(tmp_path / "r.json")
    writing.check_writable(tmp_path / "new.json")
    assert os.listdir(tmp_path) == ["r.json"]
    assert (tmp_path / "r.json").read_text() == "mine"


@pytest.mark.parametrize("step", ["fsync", "replace"])
@pytest.mark.parametrize("trouble", [OSError(28, "No space left on device"), KeyboardInterrupt()])
def test_a_failure_half_way_leaves_the_earlier_file(tmp_path, monkeypatch, step, trouble):
    target = tmp_path / "r.md"
    target.write_text("earlier")

    def fail(*_):
        raise trouble

    monkeypatch.setattr(writing.os, step, fail)
    kind = DataError if isinstance(trouble, OSError) else KeyboardInterrupt
    with pytest.raises(kind, match=r"no space left|^$"):
        writing.save(make_record(), target)
    monkeypatch.undo()
    assert os.listdir(tmp_path) == ["r.md"]
    assert target.read_text() == "earlier"


def test_permissions_are_those_of_any_new_file_or_of_the_earlier_one(tmp_path):
    (tmp_path / "plain.txt").write_text("")
    writing.save(make_record(), tmp_path / "r.csv")
    mode = stat.S_IMODE((tmp_path / "r.csv").stat().st_mode)
    assert mode == stat.S_IMODE((tmp_path / "plain.txt").stat().st_mode)
    (tmp_path / "r.csv").chmod(0o640)
    writing.save(make_record(), tmp_path / "r.csv")
    assert stat.S_IMODE((tmp_path / "r.csv").stat().st_mode) == 0o640


def test_a_link_is_followed(tmp_path):
    (tmp_path / "kept").mkdir()
    (tmp_path / "kept" / "r.csv").write_text("earlier")
    (tmp_path / "r.csv").symlink_to(tmp_path / "kept" / "r.csv")
    writing.save(make_record(), tmp_path / "r.csv")
    assert (tmp_path / "r.csv").is_symlink()
    assert (tmp_path / "kept" / "r.csv").read_text().startswith("candidate,")


def test_a_name_without_an_encoding_is_still_saved(tmp_path):
    writing.save(make_record(make_candidate("\ud800")), tmp_path / "r.csv")
    assert "\\ud800" in (tmp_path / "r.csv").read_text()


def test_creating_never_overwrites(tmp_path):
    writing.create_text(tmp_path / "s.py", "one\n")
    with pytest.raises(DataError, match="it is there already and is not overwritten"):
        writing.create_text(tmp_path / "s.py", "two\n")
    (tmp_path / "dangling.py").symlink_to(tmp_path / "nowhere.py")
    with pytest.raises(DataError, match="it is there already"):
        writing.create_text(tmp_path / "dangling.py", "two\n")
    with pytest.raises(DataError, match="cannot be written"):
        writing.create_text(tmp_path / "missing" / "s.py", "two\n")
    assert (tmp_path / "s.py").read_text() == "one\n"
    assert sorted(os.listdir(tmp_path)) == ["dangling.py", "s.py"]


def test_creating_leaves_nothing_where_it_fails(tmp_path, monkeypatch):
    def fail(*_):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(writing.os, "replace", fail)
    with pytest.raises(DataError, match="no space left"):
        writing.create_text(tmp_path / "s.py", "one\n")
    assert os.listdir(tmp_path) == []
