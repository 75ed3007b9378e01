"""Link files and the options over them."""

import os

import numpy as np
import pytest

from monitor.errors import InputError
from monitor.linkfile import LinkOptions, read_link_file, read_pulse


def written(folder, text):
    path = folder / "link.toml"
    path.write_bytes(text if isinstance(text, bytes) else text.encode("utf-8"))
    return path


def test_every_key_is_read(tmp_path):
    path = written(
        tmp_path,
        """
        [link]
        name = "Skerry tide gauge"
        symbol_rate_hz = 9600
        scheme = "fsk2"
        pulse = "gauss:0.5"
        carrier_hz = -1.5e3
        timing = "gardner"
        loop_bandwidth = 0.01
        """,
    )
    file = read_link_file(path)
    assert file.n_alarms == 0
    assert file.link == LinkOptions(9600.0, "fsk2", "gauss:0.5", -1500.0, "gardner", 0.01, "Skerry tide gauge")
    wanted = file.link.wanted()
    assert wanted.scheme.name == "fsk2"
    assert str(wanted.pulse) == "gauss:0.5"
    assert (wanted.symbol_rate_hz, wanted.carrier_hz, wanted.name) == (9600.0, -1500.0, "Skerry tide gauge")


def test_auto_and_what_is_not_given_are_left_to_be_found(tmp_path):
    keys = ("symbol_rate_hz", "scheme", "pulse", "carrier_hz", "timing", "loop_bandwidth")
    lines = "".join(f'{key} = "auto"\n' for key in keys)
    assert read_link_file(written(tmp_path, "[link]\n" + lines)).link == LinkOptions()
    assert read_link_file(written(tmp_path, "")).link == LinkOptions()
    wanted = LinkOptions().wanted()
    assert (wanted.scheme, wanted.symbol_rate_hz, wanted.pulse, wanted.carrier_hz) == (None, None, None, None)


def test_a_link_may_be_called_auto(tmp_path):
    assert read_link_file(written(tmp_path, '[link]\nname = "auto"')).link.name == "auto"


def test_options_win_over_the_file_key_by_key():
    file = LinkOptions(9600.0, "fsk2", "rect", 100.0, "gardner", 0.01, "Skerry tide gauge")
    typed = LinkOptions(symbol_rate_hz=4800.0, carrier_hz=0.0)
    assert typed.over(file) == LinkOptions(4800.0, "fsk2", "rect", 0.0, "gardner", 0.01, "Skerry tide gauge")
    assert LinkOptions().over(file) == file


def test_alarm_rules_are_counted(tmp_path):
    rule = '[[alarm]]\nrule = "opening_pct < 40"\nseverity = "high"\n'
    file = read_link_file(written(tmp_path, '[link]\nscheme = "fsk2"\n' + rule + rule))
    assert (file.n_alarms, file.link.scheme) == (2, "fsk2")


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("[link", "not TOML"),
        (b'[link]\nname = "\xff"', "not TOML"),
        ("a = " + "[" * 5000, "not TOML"),
        ("x" * (1 << 20) + "x", "more than 1048576 bytes"),
        ("symbol_rate_hz = 9600", "'symbol_rate_hz' has no meaning here"),
        ("link = 3", r"\[link\] must be a table"),
        ("alarm = 3", r"write each as \[\[alarm\]\]"),
        ('[alarm]\nrule = "q < 3"', r"write each as \[\[alarm\]\]"),
        ("alarm = [1]", r"write each as \[\[alarm\]\]"),
        ("[link]\nbaud = 9600", "'baud' is not a key of .link.; take name, scheme, pulse, timing, symbol_rate_hz"),
        ('[link]\nsymbol_rate_hz = "fast"', "symbol_rate_hz must be a number, got 'fast'"),
        ("[link]\nsymbol_rate_hz = true", "symbol_rate_hz must be a number, got True"),
        ("[link]\nsymbol_rate_hz = 0", "symbol_rate_hz must be above 0"),
        ("[link]\nsymbol_rate_hz = nan", "symbol_rate_hz must be finite"),
        ("[link]\ncarrier_hz = inf", "carrier_hz must be finite"),
        ("[link]\ncarrier_hz = 1" + "0" * 400, "carrier_hz must be finite"),
        ("[link]\nloop_bandwidth = 0.5", "loop_bandwidth must lie between 1e-05 and 0.05"),
        ("[link]\nscheme = 2", "scheme must be text, got 2"),
        ("[link]\nname = 2", "name must be text, got 2"),
        ('[link]\ntiming = "early"', "timing 'early' is not known; take auto, gardner, mueller-muller, derivative"),
    ],
)
def test_a_mistake_is_named_with_the_file(tmp_path, text, says):
    path = written(tmp_path, text)
    with pytest.raises(InputError, match=says) as caught:
        read_link_file(path)
    assert str(path) in str(caught.value)
    assert "\n" not in str(caught.value)


@pytest.mark.parametrize("name", ["absent.toml", ".", "a\0b"])
def test_a_file_that_cannot_be_read_is_named(tmp_path, name):
    with pytest.raises(InputError, match="link file"):
        read_link_file(tmp_path / name)


def test_unknown_schemes_and_pulses_are_refused_with_what_there_is():
    with pytest.raises(InputError, match="scheme 'qam17' is not known; take one of pam2"):
        LinkOptions(scheme="qam17").wanted()
    with pytest.raises(InputError, match="pulse 'cosine' is not known"):
        LinkOptions(pulse="cosine").wanted()
    assert LinkOptions(scheme="nrz").wanted().scheme.name == "pam2"


def test_taps_are_read_from_text_and_from_numpy_files(tmp_path):
    (tmp_path / "taps.txt").write_text("0.25\n0.5\n\n 0.25 - 0.1j\n")
    assert read_pulse(f"taps:{tmp_path}/taps.txt").taps == (0.25, 0.5, 0.25 - 0.1j)
    np.save(tmp_path / "taps.npy", np.array([0.25, 0.5, 0.25], np.float32))
    assert read_pulse(f"taps:{tmp_path}/taps.npy").taps == (0.25, 0.5, 0.25)


def test_taps_named_in_a_link_file_lie_beside_it(tmp_path, monkeypatch):
    monkeypatch.chdir(os.sep)
    (tmp_path / "taps.txt").write_text("1\n")
    link = read_link_file(written(tmp_path, '[link]\npulse = "taps:taps.txt"')).link
    assert link.wanted().pulse.taps == (1.0,)


@pytest.mark.parametrize(
    ("name", "content", "says"),
    [
        ("taps.txt", b"0.25\nhalf\n", "no taps there"),
        ("taps.txt", b"\xff\xfe", "no taps there"),
        ("taps.txt", b"", "taps must be finite numbers, at least one"),
        ("taps.txt", b"nan\n", "taps must be finite"),
        ("taps.txt", b"1e400\n", "taps must be finite"),
        ("taps.txt", b"0\n0\n", "all taps are 0"),
        ("taps.txt", b"1\n" * 4097, "at most 4096"),
        ("taps.txt", b"1\n" * (1 << 20), "more than 1048576 bytes"),
        ("taps.npy", b"", "no taps there"),
        ("taps.npy", b"\x93NUMPY\x01\x00", "no taps there"),
        ("taps.npy", b"0.25\n", "no taps there"),
    ],
)
def test_bad_taps_are_one_line(tmp_path, name, content, says):
    (tmp_path / name).write_bytes(content)
    with pytest.raises(InputError, match=says) as caught:
        read_pulse(f"taps:{tmp_path / name}")
    assert "\n" not in str(caught.value)


@pytest.mark.parametrize("values", [np.array(["a", "b"]), np.array([1, None], dtype=object), np.zeros((0, 3))])
def test_numpy_files_of_something_else_are_refused(tmp_path, values):
    np.save(tmp_path / "taps.npy", values)
    with pytest.raises(InputError, match="taps"):
        read_pulse(f"taps:{tmp_path / 'taps.npy'}")


def test_a_numpy_file_that_claims_more_than_memory_is_refused(tmp_path):
    np.save(tmp_path / "taps.npy", np.ones(3))
    content = (tmp_path / "taps.npy").read_bytes()
    (tmp_path / "taps.npy").write_bytes(
        content.replace(b"(3,)", b"(9" + b"9" * 14 + b",)").replace(b" " * 15 + b"\n", b"\n")
    )
    with pytest.raises(InputError, match="no taps there"):
        read_pulse(f"taps:{tmp_path / 'taps.npy'}")


def test_absent_taps_are_named():
    with pytest.raises(InputError, match=r"taps nowhere\.txt: No such file"):
        read_pulse("taps:nowhere.txt")
