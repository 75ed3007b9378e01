"""The command: what is typed, what comes back."""

import os
import pty
import select
import signal
import struct
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, example, given, settings
from hypothesis import strategies as st

from monitor.cli import main
from monitor.version import version
from tests.monitor.recordings import (
    PAM2,
    QPSK,
    RAW,
    RAW_REAL,
    ROOT,
    command,
    environment,
    one_line,
    pam2,
    qpsk,
    raw,
    run_program,
    start_program,
    strict_json,
    wav_bytes,
)

ALL, BROKEN, UNUSABLE, NOTHING, INTERRUPTED = 0, 1, 2, 3, 130
RELIED_ON = """--rate --format --channels --iq --start --duration --symbol-rate --scheme --pulse --carrier --timing
    --loop-bandwidth --link --json --picture --report --target-ber"""


@pytest.fixture
def lidwatch(capsys):
    """Run the command here; status, standard output, standard error."""

    def run(*arguments):
        capsys.readouterr()
        status = main(["replay", *arguments])
        captured = capsys.readouterr()
        return status, captured.out, captured.err

    return run


@pytest.fixture
def measured(lidwatch):
    """Run the command with --json on what must be measured; the document."""

    def run(*arguments):
        status, out, err = lidwatch(*arguments, "--json")
        assert (status, err) == (ALL, "")
        return strict_json(out)

    return run


@pytest.fixture
def recording(tmp_path):
    return raw(tmp_path, qpsk())


# -- the commands ------------------------------------------------------------------------------------------------------


def typed(capsys, *arguments):
    status = main(arguments)
    captured = capsys.readouterr()
    return status, captured.out, captured.err


def test_the_version_is_the_distribution_s(capsys):
    import tomllib

    project = tomllib.loads((ROOT / "pyproject.toml").read_text())["project"]
    assert version() == project["version"]
    assert typed(capsys, "--version") == (ALL, f"lidwatch {version()}\n", "")


def test_without_a_command_one_line_says_what_to_type(capsys):
    status, out, err = typed(capsys)
    assert (status, out) == (UNUSABLE, "")
    assert "lidwatch replay FILE" in one_line(err)


@pytest.mark.parametrize("name", ["frobnicate", "surveys", ""])
def test_an_unknown_command_is_one_line_that_names_those_there_are(capsys, name):
    status, out, err = typed(capsys, name)
    assert (status, out) == (UNUSABLE, "")
    assert "replay" in one_line(err)


def test_help_lists_only_what_exists(capsys):
    status, out, err = typed(capsys, "--help")
    assert (status, err) == (ALL, "")
    commands = {line.split()[0] for line in out.splitlines() if line.startswith("    ") and line[4:5].strip()}
    assert commands == {"replay", "watch", "probe", "survey", "keys"}
    status, out, _ = typed(capsys, "replay", "--help")
    assert status == ALL
    for option in RELIED_ON.split():
        assert option in out


@pytest.mark.parametrize(
    ("arguments", "says"),
    [
        ((), "required: FILE"),
        (("x.iq", "--rate", "fast"), "--rate: must be a number, got 'fast'"),
        (("x.iq", "--rate", "-48000"), "--rate: must be above 0"),
        (("x.iq", "--rate", "-1e3"), "--rate: must be above 0"),
        (("x.iq", "--rate"), "--rate: expected one argument"),
        (("x.iq", "--carrier", "inf"), "--carrier: must be finite"),
        (("x.iq", "--threads", "3"), "--threads: invalid choice"),
        (("x.iq", "--timing", "early"), "--timing: invalid choice: 'early'"),
        (("x.iq", "--frobnicate"), "unrecognized arguments: --frobnicate"),
        (("x.iq", "--sym", "9600"), "unrecognized arguments: --sym"),
        (("x.iq", "y.iq", *RAW), "x.iq: no such file"),
        (("x.iq", "--picture-size", "0x0"), "--picture-size"),
        (("x.iq", "--picture", "eye.jpg"), "is written as PNG; give a name that ends in .png"),
        (("x.iq", "--report", "report.pdf"), "is written as HTML; give a name that ends in .html"),
        (("x.iq", "--report", "nowhere/report.html"), "there is no folder nowhere; make it first"),
        (("x.iq", "--picture", "nowhere/eye.png"), "there is no folder nowhere; make it first"),
        (("x.iq", "--scheme", "qam17", *RAW), "scheme 'qam17' is not known; take one of"),
        (("x.iq", "--pulse", "rrc", *RAW), "rrc needs its roll-off"),
        (("x.iq", "--pulse", "rrc:2", *RAW), "rrc needs its roll-off"),
        (("x.iq", "--pulse", "taps:nowhere.txt", *RAW), "nowhere.txt: No such file"),
        (("x.iq", "--link", "nowhere.toml", *RAW), "link file nowhere.toml: No such file"),
        (("x.iq", "--format", "cf33", "--rate", "1"), "unknown sample format 'cf33'"),
        (("x.iq", "--start", "-1"), "--start: must be 0 or above"),
        (("x.iq", *RAW), "x.iq: no such file"),
    ],
)
def test_a_mistake_is_one_line_and_status_2(lidwatch, tmp_path, monkeypatch, arguments, says):
    monkeypatch.chdir(tmp_path)
    status, out, err = lidwatch(*arguments)
    assert (status, out) == (UNUSABLE, "")
    assert says in one_line(err)
    assert err.startswith("lidwatch: ")


# -- what comes back ---------------------------------------------------------------------------------------------------


def test_json_is_one_document_and_nothing_else(recording):
    status, out, err = run_program("replay", recording, *RAW, *QPSK, "--json")
    assert (status, err) == (ALL, "")
    found = strict_json(out)
    assert found["reading"]["snr_db"] == pytest.approx(25, abs=0.5)
    assert found["source"]["uri"] == recording


def test_text_is_told_without_json(lidwatch, recording):
    status, out, err = lidwatch(recording, *RAW, *QPSK)
    assert (status, err) == (ALL, "")
    assert out.startswith(f"{recording}: cf32_le, 48000 Hz, 0.250 s\nqpsk at 12000 Bd, pulse rrc:0.35")
    assert "\nopening " in out


def test_options_reach_the_chain(measured, recording):
    found = measured(
        recording,
        *RAW,
        *QPSK,
        *["--window", "500", "--draw-every", "4", "--timing", "gardner", "--loop-bandwidth", "0.01", "--threads", "1"],
    )
    assert found["windows"]["symbols_each"] == 500
    assert found["windows"]["count"] >= 4
    assert found["speed"]["coverage_pct"] == pytest.approx(25, abs=4)
    slower = measured(recording, *RAW, *QPSK, "--timing", "gardner", "--loop-bandwidth", "0.001")
    assert slower["reading"]["jitter_rms_ui"] < 0.7 * found["reading"]["jitter_rms_ui"]
    strict = measured(recording, *RAW, *QPSK, "--target-ber", "1e-12")
    assert strict["reading"]["opening_at_ber_pct"] < found["reading"]["opening_at_ber_pct"] - 2


def test_a_carrier_below_the_centre_is_given_with_its_sign(measured, tmp_path):
    path = raw(tmp_path, qpsk(carrier_hz=-3000.0))
    found = measured(path, *RAW, *QPSK, "--carrier", "-3e3")
    assert found["reading"]["carrier_hz"] == pytest.approx(-3000, abs=1.2)
    assert "carrier_hz" not in found["link"]["identified"]


def test_start_and_duration_take_a_stretch(measured, recording):
    found = measured(recording, *RAW, *QPSK, "--start", "0.05", "--duration", "0.125")
    assert found["source"]["samples"] == 6000
    assert found["source"]["seconds"] == 0.125


def test_a_start_behind_the_end_is_refused(lidwatch, recording):
    status, out, err = lidwatch(recording, *RAW, *QPSK, "--start", "5")
    assert (status, out) == (UNUSABLE, "")
    assert "beyond the end; the recording lasts 0.25 s" in one_line(err)


def test_samples_come_through_a_pipe(recording):
    data = Path(recording).read_bytes()
    status, out, err = run_program("replay", "-", *RAW, *QPSK, "--json", stdin=data)
    assert (status, err) == (ALL, "")
    found = strict_json(out)
    assert found["source"]["uri"] == "-"
    assert found["source"]["samples"] == qpsk().size


def test_an_empty_pipe_is_nothing_to_measure():
    status, out, err = run_program("replay", "-", *RAW, "--json", stdin=b"")
    assert status == NOTHING
    assert "there are no samples" in one_line(err)
    assert strict_json(out)["source"]["notes"] == ["the stream ended without a sample"]


def test_a_closed_standard_input_is_one_line():
    words = " ".join(command("replay", "-", *RAW))
    done = subprocess.run(["bash", "-c", f"{words} <&-"], env=environment(), capture_output=True, timeout=60)
    assert done.returncode == UNUSABLE
    assert "standard input: is closed" in one_line(done.stderr.decode())


def test_two_channels_need_a_choice(lidwatch, measured, tmp_path):
    path = tmp_path / "stereo.wav"
    path.write_bytes(wav_bytes(qpsk().view(np.float32).reshape(-1, 2)))
    status, out, err = lidwatch(str(path), *QPSK)
    assert (status, out) == (UNUSABLE, "")
    assert "2 channels; choose one with --channels, or say --iq" in one_line(err)
    assert measured(str(path), *QPSK, "--iq")["reading"]["snr_db"] == pytest.approx(25, abs=0.5)
    assert lidwatch(str(path), *QPSK, "--channels", "3")[0] == UNUSABLE
    assert lidwatch(str(path), *QPSK, "--channels", "1,1")[0] == UNUSABLE


def test_one_of_two_channels_is_a_link_of_its_own(measured, tmp_path):
    path = tmp_path / "two.wav"
    path.write_bytes(wav_bytes(np.stack([0 * pam2(), pam2()], axis=1)))
    found = measured(str(path), *PAM2, "--channels", "2")
    assert found["reading"]["snr_db"] == pytest.approx(25, abs=0.5)


def test_one_channel_is_not_i_and_q(lidwatch, tmp_path):
    path = tmp_path / "mono.wav"
    path.write_bytes(wav_bytes(pam2()))
    status, _, err = lidwatch(str(path), "--iq")
    assert status == UNUSABLE
    assert "--iq needs two channels" in one_line(err)


# -- the link file -----------------------------------------------------------------------------------------------------


def test_a_link_file_says_all_and_options_win_over_it(measured, recording, tmp_path):
    path = tmp_path / "link.toml"
    path.write_text(
        '[link]\nname = "Skerry tide gauge"\nsymbol_rate_hz = 12000\nscheme = "qpsk"\npulse = "rrc:0.35"\n'
        'carrier_hz = 0\ntiming = "mueller-muller"\nloop_bandwidth = 0.002\n'
    )
    found = measured(recording, *RAW, "--link", str(path))
    assert found["link"]["identified"] == []
    over = measured(recording, *RAW, "--link", str(path), "--pulse", "rrc:0.3", "--loop-bandwidth", "0.02")
    assert over["link"]["pulse"] == "rrc:0.3"
    assert over["link"]["scheme"] == "qpsk"
    assert over["reading"]["jitter_rms_ui"] > 1.5 * found["reading"]["jitter_rms_ui"]


@pytest.mark.parametrize(("rule", "expected"), [("snr_db < 10", ALL), ("snr_db < 40", BROKEN)])
def test_limits_of_the_link_file_make_the_status(lidwatch, tmp_path, rule, expected):
    path, link = raw(tmp_path, qpsk(40_000)), tmp_path / "link.toml"
    link.write_text(f'[link]\nscheme = "qpsk"\n[[alarm]]\nrule = "{rule}"\n')
    status, out, err = lidwatch(path, *RAW, *QPSK, "--link", str(link), "--json")
    assert (status, err) == (expected, "")
    assert [alarm["rule"] for alarm in strict_json(out)["alarms"]] == ([rule] if expected else [])


def test_a_rule_with_a_mistake_is_named(lidwatch, recording, tmp_path):
    link = tmp_path / "link.toml"
    link.write_text('[[alarm]]\nrule = "openness < 40"\n')
    status, out, err = lidwatch(recording, *RAW, *QPSK, "--link", str(link))
    assert (status, out) == (UNUSABLE, "")
    assert f"link file {link}" in one_line(err)


def test_a_link_file_with_a_mistake_is_named(lidwatch, recording, tmp_path):
    path = tmp_path / "link.toml"
    path.write_text("[link]\nbaud = 9600\n")
    status, out, err = lidwatch(recording, *RAW, "--link", str(path))
    assert (status, out) == (UNUSABLE, "")
    assert f"link file {path}: 'baud' is not a key" in one_line(err)


# -- pictures ----------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("theme", ["light", "dark"])
def test_a_picture_is_made_beside_the_document(lidwatch, recording, tmp_path, theme):
    picture = tmp_path / "eye.png"
    status, out, err = lidwatch(
        recording, *RAW, *QPSK, "--json", "--picture", str(picture), "--theme", theme, "--picture-size", "800x500"
    )
    assert (status, err) == (ALL, "")
    strict_json(out)
    header = picture.read_bytes()[:24]
    assert header[:8] == b"\x89PNG\r\n\x1a\n"
    assert struct.unpack(">II", header[16:24]) == (800, 500)


def test_a_picture_without_a_lock_is_made_too(lidwatch, tmp_path):
    path, picture = raw(tmp_path, 0 * qpsk()), tmp_path / "eye.png"
    status, _, err = lidwatch(path, *RAW, "--picture", str(picture))
    assert status == NOTHING
    one_line(err)
    assert picture.read_bytes()[:4] == b"\x89PNG"


def test_a_picture_that_cannot_be_written_loses_no_figure(lidwatch, recording, tmp_path):
    (tmp_path / "x.png").mkdir()
    status, out, err = lidwatch(recording, *RAW, *QPSK, "--picture", str(tmp_path / "x.png"))
    assert (status, out) == (UNUSABLE, "")
    assert "is a folder" in one_line(err)
    status, out, err = lidwatch(recording, *RAW, *QPSK, "--json", "--picture", str(tmp_path / ("x" * 252 + ".png")))
    assert status == UNUSABLE
    assert "cannot be written: File name too long" in one_line(err)
    assert strict_json(out)["reading"]["symbols"] > 2800


# -- reports -----------------------------------------------------------------------------------------------------------


def test_a_report_is_made_beside_the_document_and_changes_none_of_it(lidwatch, recording, tmp_path):
    report = tmp_path / "link.html"
    status, out, err = lidwatch(recording, *RAW, *QPSK, "--json", "--report", str(report))
    assert (status, err) == (ALL, "")
    _, alone, _ = lidwatch(recording, *RAW, *QPSK, "--json")
    assert strict_json(out)["reading"] == strict_json(alone)["reading"]
    html = report.read_text(encoding="utf-8")
    assert f"{strict_json(out)['reading']['opening_pct']:.1f} <small>% open" in html
    assert "The opening over the stream" in html


def test_a_file_name_that_is_html_stays_a_name(lidwatch, tmp_path):
    path = tmp_path / "<script>alert(1)<!--.iq"
    path.write_bytes(qpsk().tobytes())
    report = tmp_path / "link.html"
    status, _, err = lidwatch(str(path), *RAW, *QPSK, "--report", str(report))
    assert (status, err) == (ALL, "")
    html = report.read_text(encoding="utf-8")
    assert "<script" not in html
    assert "<!--" not in html
    assert "&lt;script&gt;alert(1)&lt;!--.iq" in html


def test_a_report_without_a_lock_says_so(lidwatch, tmp_path):
    path, report = raw(tmp_path, 0 * qpsk()), tmp_path / "link.html"
    status, _, err = lidwatch(path, *RAW, "--report", str(report))
    assert status == NOTHING
    assert one_line(err).rpartition("nothing to measure: ")[2].strip() in report.read_text(encoding="utf-8")


# -- bad input ---------------------------------------------------------------------------------------------------------


def noise(seed=3, n=40000):
    rng = np.random.default_rng(seed)
    return (rng.standard_normal(n) + 1j * rng.standard_normal(n)).astype(np.complex64)


N = np.arange(40000)
LINKLESS = {
    "zeros": np.zeros(40000, np.complex64),
    "noise": noise(),
    "a bare tone": np.exp(2j * np.pi * 0.0371 * N).astype(np.complex64),
    "a tone in noise": (np.exp(2j * np.pi * 0.0371 * N) + 0.1 * noise()).astype(np.complex64),
    "one impulse": (N == 20000).astype(np.complex64),
    "a single sample": np.ones(1, np.complex64),
}


@pytest.mark.parametrize("what", LINKLESS)
@pytest.mark.parametrize("kind", ["iq", "real"])
@pytest.mark.parametrize("link", ["given", "found"])
def test_what_is_no_link_is_never_locked_to(lidwatch, tmp_path, what, kind, link):
    samples = LINKLESS[what]
    options = {"iq": (RAW, QPSK), "real": (RAW_REAL, PAM2)}[kind]
    path = raw(tmp_path, samples if kind == "iq" else np.ascontiguousarray(samples.real))
    status, out, err = lidwatch(path, *options[0], *(options[1] if link == "given" else ()), "--json")
    assert status == NOTHING
    assert "nothing to measure: " in one_line(err)
    found = strict_json(out)
    assert found["reading"] is None
    assert found["lock"]["timing"] is False
    assert found["lock"]["reason"]
    assert found["source"]["samples"] == samples.size


def test_an_empty_file_is_refused(lidwatch, tmp_path):
    path = tmp_path / "empty.iq"
    path.touch()
    status, out, err = lidwatch(str(path), *RAW)
    assert (status, out) == (UNUSABLE, "")
    assert "is empty" in one_line(err)


@pytest.mark.parametrize("name", ["x.wav", "x.flac", "x.sigmf-meta"])
def test_a_file_of_something_else_is_refused(lidwatch, tmp_path, name):
    path = tmp_path / name
    path.write_bytes(b"\x89PNG\r\n\x1a\n" + bytes(range(256)) * 8)
    status, out, err = lidwatch(str(path))
    assert (status, out) == (UNUSABLE, "")
    assert name in one_line(err)


def test_raw_samples_need_rate_and_format(lidwatch, recording):
    for options, says in (
        ((), "--rate HZ"),
        (("--format", "cf32"), "--rate HZ"),
        (("--rate", "48000"), "--format NAME"),
    ):
        status, out, err = lidwatch(recording, *options)
        assert (status, out) == (UNUSABLE, "")
        assert says in one_line(err)


def test_an_unreadable_file_is_refused(lidwatch, tmp_path, monkeypatch):
    path = raw(tmp_path, qpsk())
    if os.geteuid() == 0:  # who may read everything
        real = open

        def refuse(name, *rest, **more):
            if name == path:
                raise PermissionError(13, "Permission denied")
            return real(name, *rest, **more)

        monkeypatch.setattr("builtins.open", refuse)
    else:
        os.chmod(path, 0)
    status, out, err = lidwatch(path, *RAW)
    assert (status, out) == (UNUSABLE, "")
    assert "cannot be read: Permission denied" in one_line(err)


def test_a_directory_is_refused(lidwatch, tmp_path):
    status, _, err = lidwatch(str(tmp_path), *RAW)
    assert status == UNUSABLE
    assert "is a directory" in one_line(err)


def test_bytes_left_over_are_noted_and_the_rest_measured(measured, tmp_path):
    path = Path(raw(tmp_path, qpsk()))
    path.write_bytes(path.read_bytes()[:-3])
    found = measured(str(path), *RAW, *QPSK)
    assert found["source"]["samples"] == qpsk().size - 1
    assert found["source"]["notes"] == ["left out 5 bytes at the end: not a whole sample"]
    assert found["reading"]["symbols"] > 2800


def test_a_header_that_claims_more_is_noted_and_the_rest_measured(measured, lidwatch, tmp_path):
    path = tmp_path / "cut.wav"
    path.write_bytes(wav_bytes(pam2())[:-16000])
    found = measured(str(path), *PAM2)
    assert len(found["source"]["notes"]) == 1
    assert found["source"]["samples"] == pytest.approx(pam2().size - 4000, abs=2)
    assert found["reading"]["symbols"] > 1800
    text = lidwatch(str(path), *PAM2)[1]
    assert f"note: {found['source']['notes'][0]}\n" in text


def test_a_cut_flac_file_is_measured_as_far_as_it_goes(measured, tmp_path):
    import soundfile

    path = tmp_path / "cut.flac"
    soundfile.write(path, pam2() * 0.2, 48000, subtype="PCM_16")
    path.write_bytes(path.read_bytes()[: path.stat().st_size // 2])
    found = measured(str(path), *PAM2)
    assert found["source"]["notes"]
    assert 700 < found["reading"]["symbols"] < 2000


@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf])
def test_samples_that_are_not_finite_are_counted_and_the_rest_measured(measured, tmp_path, bad):
    samples = qpsk().copy()
    samples[[100, 5000, 5001]] = bad
    found = measured(raw(tmp_path, samples), *RAW, *QPSK)
    assert found["source"]["nonfinite"] == 3
    assert found["reading"]["symbols"] > 2800


def test_nothing_but_nan_is_nothing_to_measure(lidwatch, tmp_path):
    status, out, err = lidwatch(raw(tmp_path, np.full(9000, np.nan, np.complex64)), *RAW, "--json")
    assert status == NOTHING
    one_line(err)
    assert strict_json(out)["source"]["nonfinite"] == 9000


def test_clipped_samples_are_counted(measured, tmp_path):
    samples = qpsk().view(np.float32) / np.abs(qpsk().view(np.float32)).max()
    codes = np.clip(samples * 40000, -32768, 32767).astype("<i2")
    path = raw(tmp_path, codes)
    found = measured(path, "--format", "ci16", "--rate", "48000", *QPSK)
    pairs = codes.reshape(-1, 2)
    clipped = np.any((pairs <= -32767) | (pairs == 32767), axis=1).mean()
    assert clipped > 0
    assert found["source"]["clipped_pct"] == pytest.approx(100 * clipped)


@pytest.mark.parametrize("link", ["given", "found"])
def test_the_unit_of_the_samples_does_not_matter(measured, tmp_path, link):
    options = QPSK if link == "given" else ()
    plain = measured(raw(tmp_path, qpsk()), *RAW, *options)["reading"]
    for scale in (1e-30, 1e30) if link == "found" else (1e-30, 1e-12, 1e12, 1e30):
        scaled = measured(raw(tmp_path, qpsk() * np.float32(scale)), *RAW, *options)["reading"]
        assert scaled["snr_db"] == pytest.approx(plain["snr_db"], abs=0.02)
        assert scaled["opening_pct"] == pytest.approx(plain["opening_pct"], abs=0.5)


def test_values_at_the_end_of_the_number_range_are_no_traceback(lidwatch, tmp_path):
    for scale in (3e38, 1e-40):
        status, out, err = lidwatch(raw(tmp_path, (noise() * 0.1 * np.float32(scale))), *RAW, *QPSK, "--json")
        assert status == NOTHING
        one_line(err)
        strict_json(out)


@pytest.mark.parametrize("name", ["cu8", "ri16", "cf64", "ri32_be"])
def test_samples_read_in_the_wrong_format_are_not_locked_to(lidwatch, recording, name):
    status, out, err = lidwatch(recording, "--rate", "48000", "--format", name, "--json")
    assert status == NOTHING
    one_line(err)
    assert strict_json(out)["reading"] is None


def test_a_recording_too_short_to_measure_says_so(lidwatch, tmp_path):
    status, out, err = lidwatch(raw(tmp_path, qpsk()[:200]), *RAW, *QPSK, "--json")
    assert status == NOTHING
    assert "nothing to measure" in one_line(err)
    assert strict_json(out)["reading"] is None


def test_a_name_that_is_not_utf_8_is_opened_and_shown_with_escapes(lidwatch, measured, tmp_path):
    name = os.fsdecode(os.fsencode(tmp_path) + b"/gauge-\xff.iq")
    Path(name).write_bytes(qpsk().tobytes())
    status, out, err = run_program("replay", name, *RAW, *QPSK)
    assert (status, err) == (ALL, "")
    assert "gauge-\\udcff.iq: cf32_le" in out
    assert measured(name, *RAW, *QPSK)["source"]["uri"] == name
    status, out, err = lidwatch(name + "x", *RAW)
    assert (status, out) == (UNUSABLE, "")
    assert "gauge-\\udcff.iqx: no such file" in one_line(err)


def test_an_old_terminal_gets_escapes_instead_of_signs(recording):
    env = environment(PYTHONIOENCODING="ascii")
    done = subprocess.run(command("replay", recording, *RAW, *QPSK), env=env, capture_output=True, timeout=60)
    assert (done.returncode, done.stderr) == (ALL, b"")
    assert b"\\xb0 rms" in done.stdout


# -- the other end of the pipe -----------------------------------------------------------------------------------------


def test_a_reader_that_has_left_is_no_error(recording, tmp_path):
    picture = tmp_path / "eye.png"
    read, write = os.pipe()
    os.close(read)
    done = subprocess.run(
        command("replay", recording, *RAW, *QPSK, "--picture", str(picture)),
        stdout=write,
        stderr=subprocess.PIPE,
        env=environment(),
        timeout=60,
    )
    os.close(write)
    assert (done.returncode, done.stderr) == (ALL, b"")
    assert picture.exists()


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="no /dev/full here")
def test_a_full_disk_is_one_line(recording):
    with open("/dev/full", "wb") as full:
        done = subprocess.run(
            command("replay", recording, *RAW, *QPSK),
            stdout=full,
            stderr=subprocess.PIPE,
            env=environment(),
            timeout=60,
        )
    assert done.returncode == UNUSABLE
    assert "standard output cannot be written: No space left on device" in one_line(done.stderr.decode())


def test_closed_standard_streams_do_no_harm(recording, tmp_path):
    picture = tmp_path / "eye.png"
    words = " ".join(command("replay", recording, *RAW, *QPSK, "--picture", str(picture)))
    done = subprocess.run(["bash", "-c", f"{words} >&- 2>&- <&-"], env=environment(), capture_output=True, timeout=60)
    assert (done.returncode, done.stdout, done.stderr) == (ALL, b"", b"")
    assert picture.exists()


# -- Ctrl-C ------------------------------------------------------------------------------------------------------------


def test_ctrl_c_while_waiting_for_samples_tells_what_was_measured():
    process = start_program(
        "replay", "-", *RAW, *QPSK, "--json", stdin=subprocess.PIPE, stdout=subprocess.PIPE, stderr=subprocess.PIPE
    )
    process.stdin.write(qpsk().tobytes())
    process.stdin.flush()
    _until(lambda: _pending(process.stdin) == 0)  # all is taken, and the pipe stays open and quiet
    process.send_signal(signal.SIGINT)
    out, err = process.communicate(timeout=60)
    assert (process.returncode, err) == (INTERRUPTED, b"")
    found = strict_json(out.decode())
    assert found["source"]["samples"] == qpsk().size
    assert found["reading"]["symbols"] > 2800


def test_ctrl_c_in_the_middle_of_a_recording_tells_what_was_measured(tmp_path):
    path = tmp_path / "long.iq"
    with path.open("wb") as file:
        for _ in range(800):
            file.write(qpsk().tobytes())
    read, terminal = pty.openpty()
    process = start_program(
        "replay", str(path), *RAW, *QPSK, stdout=subprocess.PIPE, stderr=terminal, start_new_session=True
    )
    os.close(terminal)
    seen = b""
    while b"measuring" not in seen:
        seen += os.read(read, 65536)
    process.send_signal(signal.SIGINT)
    out = _drain(process, read)[0].decode()
    assert process.returncode == INTERRUPTED
    assert "note: interrupted after " in out
    assert "\nopening " in out
    seconds = float(out.split("interrupted after ")[1].split(" s")[0])
    assert 0 < seconds < 800 * 0.25


def _until(true, timeout_s=30.0):
    end = time.monotonic() + timeout_s
    while not true():
        assert time.monotonic() < end, "waited too long"
        time.sleep(0.02)


def _pending(pipe):
    import array
    import fcntl
    import termios

    count = array.array("i", [0])
    fcntl.ioctl(pipe.fileno(), termios.FIONREAD, count)
    return count[0]


def _drain(process, read):
    """Read a terminal until the program has ended; its standard output, and what the terminal showed."""
    shown = b""
    while True:
        ready, _, _ = select.select([read], [], [], 0.1)
        if ready:
            try:
                more = os.read(read, 65536)
            except OSError:  # how Linux says that the other end is closed
                more = b""
            shown += more
            if not more:
                break
        elif process.poll() is not None:
            break
    out, _ = process.communicate(timeout=60)
    os.close(read)
    return out, shown


# -- terminals ---------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("columns", [40, 400])
def test_a_terminal_shows_a_bar_and_standard_output_stays_clean(tmp_path, columns):
    path = tmp_path / "long.iq"
    with path.open("wb") as file:
        for _ in range(300):
            file.write(qpsk().tobytes())
    read, terminal = pty.openpty()
    env = environment(COLUMNS=str(columns), TERM="xterm")
    process = subprocess.Popen(
        command("replay", str(path), *RAW, *QPSK, "--json"), stdout=subprocess.PIPE, stderr=terminal, env=env
    )
    os.close(terminal)
    out, shown = _drain(process, read)
    assert process.returncode == ALL
    assert strict_json(out.decode())["source"]["samples"] == 300 * qpsk().size
    assert b"\x1b[?25l" in shown  # the cursor is hidden
    assert shown.rstrip().endswith((b"\x1b[2K", b"\x1b[?25h", b"\x1b[1A"))  # and the bar wiped out
    if columns > 40:
        assert b"Msample/s" in shown
        assert b"left" in shown


# -- anything that may be typed ----------------------------------------------------------------------------------------


def one_of(words):
    return st.sampled_from(words.split())


NUMBERS = st.one_of(
    st.floats().map(str),
    st.integers(-10, 10**6).map(str),
    one_of("auto nan inf -inf 1e999 -1e-999 0 -0 1_0 0x10 1,5 ٣ 12000 4800 9600 48000"),
    st.text(max_size=5),
)
OPTIONS = {
    "--rate": NUMBERS,
    "--format": one_of("cf32 cf32_le cf32_be rf32 ci16 cu8 ri16_be cf64 rf64 ru8 x cf"),
    "--channels": one_of("1 2 1,2 2,1 0 1,1 1,2,3 , a -1"),
    "--start": NUMBERS,
    "--duration": NUMBERS,
    "--symbol-rate": NUMBERS,
    "--scheme": one_of(
        "auto pam2 nrz pam3 pam4 pam8 bpsk qpsk oqpsk pi4dqpsk 8psk 16qam 64qam fsk2 fsk4 gfsk msk gmsk QPSK x"
    ),
    "--pulse": one_of(
        "auto none rect rrc:0.35 rc:0.2 gauss:0.5 rrc:0.05 rrc:1 gauss:3 rrc rrc: rect:1 taps:x taps: :: rrc:nan"
    ),
    "--carrier": NUMBERS,
    "--timing": one_of("auto gardner mueller-muller derivative early"),
    "--loop-bandwidth": NUMBERS,
    "--window": NUMBERS,
    "--draw-every": NUMBERS,
    "--target-ber": NUMBERS,
    "--threads": one_of("1 2 3 x"),
    "--link": st.sampled_from([".", "x", "/dev/null", "a\0b"]),
    "--picture": st.sampled_from(["x", "/nowhere/x.png", "\0.png"]),
    "--theme": st.sampled_from(["light", "dark", "x"]),
    "--journal": st.sampled_from([".", "/nowhere/x.jsonl", "/dev/null", "\0.csv", "", "/dev/null.csv"]),
    "--every": NUMBERS,
}
TYPED = st.lists(
    st.one_of(
        *[values.map(lambda value, name=name: (name, value)) for name, values in OPTIONS.items()],
        st.sampled_from([("--iq",), ("--json",), ("--",), ("-",), ("--json=1",)]),
        st.text(max_size=4).map(lambda text: (text,)),
    ),
    max_size=6,
).map(lambda parts: [word for part in parts for word in part])


@pytest.fixture(scope="module")
def short_recording(tmp_path_factory):
    return raw(tmp_path_factory.mktemp("short"), qpsk()[:4000])


@settings(max_examples=120, deadline=None, derandomize=True, suppress_health_check=list(HealthCheck))
@given(words=TYPED, usable=st.booleans())
@example(words=["--scheme", "oqpsk", "--symbol-rate", "24000"], usable=True)
@example(words=["--window", "1", "--draw-every", "1000000000"], usable=True)
def test_whatever_is_typed_ends_in_a_promised_way(capsys, monkeypatch, short_recording, words, usable):
    capsys.readouterr()
    with open(os.devnull) as nothing, monkeypatch.context() as patch:
        patch.setattr(sys, "stdin", nothing)
        status = main(["replay", short_recording, *(RAW if usable else ()), *words])
    captured = capsys.readouterr()
    assert status in (ALL, UNUSABLE, NOTHING)
    assert "internal fault" not in captured.err
    if status == ALL:
        assert captured.err == ""
    elif status == UNUSABLE:
        one_line(captured.err)
        assert captured.out == ""
    else:
        one_line(captured.err)
    if captured.out.startswith("{"):
        strict_json(captured.out)


# -- faults of our own -------------------------------------------------------------------------------------------------


def test_a_fault_of_the_program_is_one_line_with_its_place(lidwatch, recording, monkeypatch):
    def fail(*_):
        raise ZeroDivisionError("by design")

    monkeypatch.setattr("monitor.session._read_head", fail)
    status, out, err = lidwatch(recording, *RAW, *QPSK)
    assert (status, out) == (UNUSABLE, "")
    assert err.count("\n") == 1
    assert "internal fault, ZeroDivisionError at " in err
    assert "test_cli.py" in err
    assert "by design" in err


def test_too_little_memory_is_one_line(lidwatch, recording, monkeypatch):
    def fail(*_):
        raise MemoryError

    monkeypatch.setattr("monitor.session._read_head", fail)
    status, out, err = lidwatch(recording, *RAW, *QPSK)
    assert (status, out) == (UNUSABLE, "")
    assert "out of memory" in one_line(err)
