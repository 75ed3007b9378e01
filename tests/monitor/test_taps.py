"""The equaliser's taps through the command: saved, and received with."""

import pytest

from monitor.cli import main
from monitor.errors import InputError
from monitor.linkfile import read_pulse
from tests.monitor.recordings import QPSK, RAW, one_line, qpsk, raw, strict_json

ECHO = ((1.0, 0.35 - 0.1j),)


@pytest.fixture
def lidwatch(capsys):
    """Run a replay here; status, standard output, standard error."""

    def run(*arguments):
        capsys.readouterr()
        status = main(["replay", *map(str, arguments)])
        captured = capsys.readouterr()
        return status, captured.out, captured.err

    return run


def test_saved_taps_receive_the_recording_as_well_as_promised(lidwatch, tmp_path):
    recording = raw(tmp_path, qpsk(6000, 24.0, echoes=ECHO))
    taps = tmp_path / "taps.txt"
    status, out, _ = lidwatch(recording, *RAW, *QPSK, "--json", "--save-taps", taps)
    assert status == 0
    first = strict_json(out)["reading"]
    lines = taps.read_text().splitlines()
    assert [line.startswith("#") for line in lines[:4]] == [True, True, True, False]
    assert f"{first['equaliser']['taps']} taps" in lines[0]
    assert all(complex(line) is not None for line in lines[3:])
    given = [argument if not argument.startswith("rrc") else f"taps:{taps}" for argument in QPSK]
    assert given != list(QPSK)
    status, out, _ = lidwatch(recording, *RAW, *given, "--json")
    assert status == 0
    second = strict_json(out)["reading"]
    assert second["opening_pct"] == pytest.approx(first["equaliser"]["opening_pct"], abs=8.0)
    assert second["opening_pct"] > first["opening_pct"] + 20.0


def test_a_place_that_cannot_be_is_refused_before_the_work(lidwatch, tmp_path):
    recording = raw(tmp_path, qpsk(600))
    for place, why in ((tmp_path, "is a folder"), (tmp_path / "none" / "taps.txt", "no folder")):
        status, out, err = lidwatch(recording, *RAW, *QPSK, "--save-taps", place)
        assert (status, out) == (2, "")
        assert why in one_line(err)


def test_too_few_symbols_are_told(lidwatch, tmp_path):
    recording = raw(tmp_path, qpsk(700))
    status, _, err = lidwatch(recording, *RAW, *QPSK, "--save-taps", tmp_path / "taps.txt")
    assert status == 2
    assert "too few symbols" in one_line(err)
    assert not (tmp_path / "taps.txt").exists()


def test_remarks_in_a_file_of_taps_are_passed_over(tmp_path):
    path = tmp_path / "taps.txt"
    path.write_text("# made by hand\n0.5\n\n1 + 0.25j  # the middle one\n0.5\n")
    assert read_pulse(f"taps:{path}").taps == (0.5, 1 + 0.25j, 0.5)
    path.write_text("# nothing but remarks\n")
    with pytest.raises(InputError, match="at least one"):
        read_pulse(f"taps:{path}")
