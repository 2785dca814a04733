"""One-line errors, and files read and written without loss."""

from __future__ import annotations

import errno
import os
import stat
import sys

import pytest

from intplan.errors import IntplanError, PlanFileError, SheetError, nearest, printable, unknown
from intplan.files import read_file, refusal, write_atomically

as_root = hasattr(os, "geteuid") and os.geteuid() == 0


def test_an_error_is_one_line_with_its_place():
    error = SheetError("bad\nrule \x1b[31m", "week\t14.toml")
    assert str(error) == r"week\t14.toml: bad\nrule \x1b[31m"
    assert (error.message, error.where) == (r"bad\nrule \x1b[31m", r"week\t14.toml")
    assert error.exit_status == 2
    assert str(PlanFileError("damaged")) == "damaged"
    assert isinstance(error, IntplanError)


@pytest.mark.parametrize(
    "text, shown",
    [
        ("Bäckerei, 日本 ✓", "Bäckerei, 日本 ✓"),
        ("a\x00b\x7f", r"a\x00b\x7f"),
        ("line\u2028next", r"line\u2028next"),
        ("turned\u202eround", r"turned\u202eround"),
        ("lone\ud800", r"lone\ud800"),
        ("\x9b2J", r"\x9b2J"),
    ],
)
def test_printable_escapes_what_a_terminal_acts_on(text, shown):
    assert printable(text) == shown
    assert printable(text).isprintable()


def test_nearest_finds_the_word_that_was_meant():
    assert nearest("lof", ["roll", "loaf"]) == "loaf"
    assert nearest("LOAF", ["loaves", "loaf"]) == "loaf"
    assert nearest("zzz", ["roll", "loaf"]) is None
    assert nearest("x" * 100_000, ["x" * 100_000]) is None


def test_unknown_names_the_nearest_word_or_lists_a_few():
    assert unknown("key", "mst", ["most"]) == 'unknown key "mst"; did you mean "most"?'
    assert unknown("key", "q", ["most", "least"]) == 'unknown key "q"; known: most, least'
    assert unknown("key", "q", [f"name{k}" for k in range(99)]) == 'unknown key "q"'


def test_reading_a_file(tmp_path):
    path = tmp_path / "sheet.toml"
    path.write_bytes(b"12345")
    assert read_file(path, 5) == b"12345"
    with pytest.raises(SheetError, match="longer than the limit of 4 bytes"):
        read_file(path, 4, SheetError)


@pytest.mark.parametrize("name", ["", "missing.toml", "sheet.toml/inside", "nul\0l", "n" * 5000])
def test_files_that_are_not_there(tmp_path, name):
    (tmp_path / "sheet.toml").write_text("")
    with pytest.raises(PlanFileError) as caught:
        read_file(os.path.join(tmp_path, name) if name else "", 10, PlanFileError)
    assert "\n" not in str(caught.value)


def test_an_empty_name_is_that_of_no_file():
    with pytest.raises(PlanFileError) as caught:
        read_file("", 10, PlanFileError)
    assert str(caught.value) == "the name of a file to read is empty"


def test_a_folder_is_no_file_and_a_slip_gets_the_nearest_name(tmp_path):
    (tmp_path / "bakery.toml").write_text("")
    with pytest.raises(IntplanError, match="folder, not a file"):
        read_file(tmp_path, 10)
    with pytest.raises(IntplanError, match=r'no such file; did you mean ".*bakery\.toml"\?'):
        read_file(tmp_path / "bakry.toml", 10)


@pytest.mark.skipif(as_root or sys.platform == "win32", reason="every file may be read")
def test_an_unreadable_file(tmp_path):
    path = tmp_path / "sheet.toml"
    path.write_text("")
    path.chmod(0)
    with pytest.raises(IntplanError, match="may not be read"):
        read_file(path, 10)


def test_an_unreadable_file_is_reported_whoever_runs_it(tmp_path, monkeypatch):
    def refuse(*_):
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr("builtins.open", refuse)
    with pytest.raises(IntplanError, match=r"secret\.toml: the file may not be read"):
        read_file("secret.toml", 10)


def test_writing_replaces_the_whole_file_and_leaves_nothing_else(tmp_path):
    path = tmp_path / "week.json"
    write_atomically(path, b"old")
    write_atomically(path, b"new")
    assert path.read_bytes() == b"new"
    assert os.listdir(tmp_path) == ["week.json"]


def test_a_failed_write_keeps_the_old_file(tmp_path, monkeypatch):
    path = tmp_path / "week.json"
    path.write_bytes(b"old")

    def fail(*_):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "replace", fail)
    with pytest.raises(IntplanError, match=r"cannot be written: No space left on device"):
        write_atomically(path, b"new")
    assert path.read_bytes() == b"old"
    assert os.listdir(tmp_path) == ["week.json"]


@pytest.mark.skipif(sys.platform == "win32", reason="permissions and links of POSIX")
def test_writing_keeps_permissions_and_links(tmp_path):
    path, link = tmp_path / "week.json", tmp_path / "latest.json"
    path.write_bytes(b"old")
    path.chmod(0o640)
    link.symlink_to(path)
    write_atomically(link, b"new")
    assert link.is_symlink()
    assert path.read_bytes() == b"new"
    assert stat.S_IMODE(path.stat().st_mode) == 0o640
    umask = os.umask(0o027)
    try:
        write_atomically(tmp_path / "fresh.json", b"")
    finally:
        os.umask(umask)
    assert stat.S_IMODE((tmp_path / "fresh.json").stat().st_mode) == 0o640


def test_places_that_cannot_be_written(tmp_path):
    with pytest.raises(IntplanError, match="folder, not a file"):
        write_atomically(tmp_path, b"")
    with pytest.raises(IntplanError, match="the folder of this file does not exist"):
        write_atomically(tmp_path / "no" / "week.json", b"")
    with pytest.raises(IntplanError, match="folder, not a file"):
        write_atomically(f"{tmp_path}/week.json{os.sep}", b"")
    with pytest.raises(IntplanError, match="the name of a file to write is empty"):
        write_atomically("", b"")
    write_atomically(os.devnull, b"to nowhere")
    assert not stat.S_ISREG(os.stat(os.devnull).st_mode)


def test_a_folder_in_which_no_file_can_be_made(tmp_path, monkeypatch):
    assert refusal(f"{tmp_path}/week.json") is None
    assert os.listdir(tmp_path) == []
    assert refusal(f"{tmp_path}/{'n' * 5000}") == os.strerror(errno.ENAMETOOLONG)

    def refuse(*_):
        raise FileNotFoundError(errno.ENOENT, "No such file or directory")

    monkeypatch.setattr(os, "open", refuse)
    assert refusal(f"{tmp_path}/week.json") == "No such file or directory"
    with pytest.raises(IntplanError, match="cannot be written: No such file or directory"):
        write_atomically(tmp_path / "week.json", b"")
