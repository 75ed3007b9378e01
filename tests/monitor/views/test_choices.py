import sys

import pytest

from monitor.views.choices import Choices, load_choices, save_choices, settings_file


def test_what_was_kept_is_found_again(tmp_path):
    path = tmp_path / "deep" / "window.ini"
    for choices in (
        Choices("dark", 1.45, None, 600.0, True, b"\x00\x01 geometry \xff"),
        Choices(None, 1.0, 0.0, None, False, b""),
    ):
        assert save_choices(path, choices)
        assert load_choices(path) == choices


def test_a_first_watch_has_the_usual_choices(tmp_path):
    assert load_choices(tmp_path / "none.ini") == Choices()


@pytest.mark.parametrize(
    "text",
    [
        "",
        "\x00\xff not an ini file [[[",
        "[General]\ntheme=purple\nzoom=nan\npersistence_s=-5\nhistory_s=soon\ntone=maybe\ngeometry=7\n",
        "[General]\nzoom=1e9\npersistence_s=inf\nhistory_s=0\n",
    ],
)
def test_a_damaged_file_is_as_none(tmp_path, text):
    path = tmp_path / "window.ini"
    path.write_text(text)
    assert load_choices(path) == Choices()


def test_choices_that_cannot_be_written_are_told(tmp_path):
    (tmp_path / "file").write_text("")
    assert not save_choices(tmp_path / "file" / "window.ini", Choices())


@pytest.mark.skipif(sys.platform != "linux", reason="the XDG base directories are Linux's")
def test_choices_lie_in_the_users_own_folder(tmp_path, monkeypatch):
    # XDG Base Directory Specification: $XDG_CONFIG_HOME
    monkeypatch.setenv("XDG_CONFIG_HOME", str(tmp_path))
    assert settings_file() == tmp_path / "lidwatch" / "window.ini"
