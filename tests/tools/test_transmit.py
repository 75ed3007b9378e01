"""The transmitter's command line and the demo recordings that it made."""

import io
import json
import shlex
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
import soundfile

from dsp.pulses import Pulse
from dsp.transmitter import TransmitSpec, transmit
from monitor.sources.formats import DATATYPES, parse_datatype
from tools.transmit import build_parser, main, spec_from

ROOT = Path(__file__).parents[2]
RECORDINGS = ROOT / "recordings"
RECIPES = sorted(RECORDINGS.glob("*.recipe.txt"))
QPSK = shlex.split("--scheme qpsk --symbol-rate 9600 --rate 48000 --pulse rrc:0.35 --symbols 300 --seed 3")
PAM = shlex.split("--scheme pam4 --symbol-rate 9600 --rate 48000 --pulse rect --symbols 300 --seed 3")


def expected(**changes):
    spec = {"scheme": "qpsk", "symbol_rate_hz": 9600.0, "sample_rate_hz": 48000.0, "symbols": 300, "seed": 3}
    return transmit(TransmitSpec(**{**spec, "pulse": Pulse("rrc", 0.35), **changes})).samples


@pytest.mark.parametrize("name", DATATYPES)
def test_raw_samples_read_back_in_every_datatype(tmp_path, name):
    out = tmp_path / "stream.raw"
    real = name.startswith("r")
    assert main([*(PAM if real else QPSK), "--format", name, str(out)]) == 0
    samples = expected(scheme="pam4", pulse=Pulse("rect")) if real else expected()
    form = parse_datatype(name)
    back = form.decode(out.read_bytes()).samples
    step = 0.0 if form.kind == "f" else 2.0 ** -(form.bits - 1)
    assert back.size == samples.size
    assert np.abs((back - samples).view(np.float32)).max() <= step / 2 + 6e-8


def test_integers_stop_at_their_ends(tmp_path):
    out = tmp_path / "loud.raw"
    assert main([*PAM, "--gain", "1", "--format", "ri16_le", str(out)]) == 0
    codes = np.fromfile(out, "<i2")
    assert (codes.min(), codes.max()) == (-32768, 32767)


@pytest.mark.parametrize("ending", [".wav", ".flac", ".aiff", ".w64", ".rf64"])
def test_a_sound_file_holds_i_and_q_as_two_channels(tmp_path, ending):
    out = tmp_path / f"stream{ending}"
    assert main([*QPSK, str(out)]) == 0
    data, rate = soundfile.read(out, dtype="float32")
    assert rate == 48000
    # the library writes 1.0 as 32767 and reads 32768 as 1.0 (FLAC apart): up to a step, and half of one from rounding
    np.testing.assert_allclose(data, expected().view(np.float32).reshape(-1, 2), atol=1.5 * 2**-15)


def test_a_float_sound_file_is_exact(tmp_path):
    out = tmp_path / "stream.wav"
    assert main([*PAM, "--subtype", "FLOAT", str(out)]) == 0
    data, _ = soundfile.read(out, dtype="float32")
    np.testing.assert_array_equal(data, expected(scheme="pam4", pulse=Pulse("rect")))


@pytest.mark.parametrize("ending", [".sigmf-meta", ".sigmf-data"])
def test_a_sigmf_pair_by_either_name_is_valid_and_complete(tmp_path, ending):
    import sigmf

    out = tmp_path / f"gauge.west{ending}"
    assert main([*QPSK, "--format", "ci16", "--frequency", "169.4e6", "--description", "a test", str(out)]) == 0
    recording = sigmf.sigmffile.fromfile(str(tmp_path / "gauge.west.sigmf-meta"))
    recording.validate()
    meta = json.loads((tmp_path / "gauge.west.sigmf-meta").read_text())
    assert meta["global"]["core:datatype"] == "ci16_le"
    assert meta["global"]["core:sample_rate"] == 48000
    assert meta["captures"][0] == {"core:sample_start": 0, "core:frequency": 169.4e6}
    np.testing.assert_allclose(np.asarray(recording[:]), expected(), atol=2**-15)


def test_standard_output_carries_raw_samples_only():
    run = subprocess.run(
        [sys.executable, str(ROOT / "tools" / "transmit.py"), *QPSK, "-"], capture_output=True, check=True, timeout=60
    )
    assert run.stderr == b""
    np.testing.assert_array_equal(np.frombuffer(run.stdout, "<c8"), expected())


def test_a_reader_that_leaves_ends_the_stream_quietly():
    words = [sys.executable, str(ROOT / "tools" / "transmit.py"), *QPSK[:8], "--seconds", "600", "-"]
    with subprocess.Popen(words, stdout=subprocess.PIPE, stderr=subprocess.PIPE) as process:
        assert len(process.stdout.read(1000)) == 1000
        process.stdout.close()
        assert process.wait(timeout=60) == 0
        assert process.stderr.read() == b""


def test_every_option_reaches_the_specification():
    words = shlex.split(
        "--scheme qpsk --symbol-rate 1000 --rate 4000 --pulse rc:0.5 --seconds 2 --seed 9 --bits prbs15 --carrier -30 "
        "--carrier-phase 20 --snr 12 --delay 0.3 --clock 40 --drift -0.5 --jitter 0.01 --jitter-sine 0.2:5 "
        "--phase-noise 0.4 --echo 1.5:0.3@90 --echo 2:0.1-0.2j --t-over-tau 2.5 --iq-gain 0.7 --iq-skew -2 "
        "--dc=-0.1+0.2j --gain 0.25 --clip soft:0.6 --dropout 0.5:0.1 out.raw"
    )
    spec = spec_from(build_parser().parse_args(words))
    wanted = TransmitSpec(
        scheme="qpsk",
        symbol_rate_hz=1000.0,
        sample_rate_hz=4000.0,
        pulse=Pulse("rc", 0.5),
        symbols=2000,
        seed=9,
        bits="prbs15",
        carrier_hz=-30.0,
        carrier_phase_deg=20.0,
        snr_db=12.0,
        delay_ui=0.3,
        clock_ppm=40.0,
        clock_drift_ppm_s=-0.5,
        jitter_rms_ui=0.01,
        jitter_sine_ui=0.2,
        jitter_sine_hz=5.0,
        phase_noise_deg=0.4,
        echoes=(spec.echoes[0], (2.0, 0.1 - 0.2j)),
        t_over_tau=2.5,
        iq_gain_db=0.7,
        iq_skew_deg=-2.0,
        dc=-0.1 + 0.2j,
        gain=0.25,
        clipping="soft",
        clip_at=0.6,
        dropouts=((0.5, 0.1),),
    )
    assert spec == wanted
    assert spec.echoes[0][1] == pytest.approx(0.3j)
    words = shlex.split(
        "--scheme fsk2 --symbol-rate 1200 --rate 48000 --pulse rect --symbols 5 --index 0.8 --passband "
        "--carrier 1700 x.wav"
    )
    spec = spec_from(build_parser().parse_args(words))
    assert (spec.modulation_index, spec.passband, spec.carrier_hz) == (0.8, True, 1700.0)


@pytest.mark.parametrize(
    ("words", "message"),
    [
        ([], "required"),
        ([*QPSK], "OUTPUT"),
        ([*QPSK, "--frob", "x.raw"], "unrecognized arguments: --frob"),
        ([*QPSK, "--rate", "fast", "x.raw"], "invalid float value"),
        ([*QPSK, "--rate", "9600", "x.raw"], "2 to 2000"),
        ([*QPSK, "--rate", "nan", "x.raw"], "sample rate"),
        ([*QPSK, "--scheme", "am", "x.raw"], "scheme 'am' is not known"),
        ([*QPSK, "--pulse", "rrc", "x.raw"], "roll-off"),
        ([*QPSK, "--pulse", "none", "x.raw"], "cannot be sent"),
        ([*QPSK, "--echo", "0.5", "x.raw"], "colon"),
        ([*QPSK, "--echo", "a:0.5", "x.raw"], "not a number"),
        ([*QPSK, "--echo", "1:loud", "x.raw"], "magnitude@degrees"),
        ([*QPSK, "--dropout", "1:long", "x.raw"], "not a number"),
        ([*QPSK, "--clip", "soft", "x.raw"], "--clip needs"),
        ([*QPSK, "--clip", "medium:0.5", "x.raw"], "clipping must be one of"),
        ([*QPSK, "--format", "cf16", "x.raw"], "unknown sample format"),
        ([*QPSK, "--format", "rf32", "x.raw"], "these samples are I/Q; take cf32_le"),
        ([*PAM, "--format", "cu8", "x.raw"], "these samples are real; take ru8"),
        ([*PAM, "--format", "ri16", "x.wav"], "--format is for raw"),
        ([*PAM, "--subtype", "MP3", "x.wav"], "--subtype MP3"),
        ([*PAM, "--rate", "48000.5", "x.wav"], "not whole"),
        ([*PAM, "--recipe", "-"], "--recipe needs a file"),
        ([*PAM[:8], "--seconds", "0", "x.raw"], "--seconds must be above 0"),
        ([*PAM[:8], "--seconds", "1", "--symbol-rate", "0", "x.raw"], "--symbol-rate must be above 0"),
        ([*PAM, "--carrier", "100", "x.raw"], "need a scheme with a carrier"),
        ([*PAM, "no/such/folder/x.raw"], "cannot write the output"),
        ([*PAM, "no/such/folder/x.wav"], "cannot write the output"),
        ([*PAM, "no/such/folder/x.sigmf-meta"], "cannot write the output"),
    ],
    ids=lambda value: value if isinstance(value, str) else "",
)
def test_what_cannot_be_used_gives_one_line_and_status_2(tmp_path, monkeypatch, capsys, words, message):
    monkeypatch.chdir(tmp_path)
    assert main(words) == 2
    captured = capsys.readouterr()
    assert captured.out == ""
    assert captured.err.startswith("transmit: ")
    assert captured.err.count("\n") == 1
    assert message in captured.err
    assert list(tmp_path.iterdir()) == []


def test_the_recipe_is_the_command_itself(tmp_path):
    words = [*PAM, "--recipe", str(tmp_path / "with a blank.wav")]
    assert main(words) == 0
    text = (tmp_path / "with a blank.recipe.txt").read_text()
    assert shlex.split(text) == ["python", "tools/transmit.py", *words]


# --- the demo recordings


def test_the_demo_recordings_are_six_and_small():
    assert len(RECIPES) == 6
    assert sum(file.stat().st_size for file in RECORDINGS.iterdir()) < 2_500_000


@pytest.mark.parametrize("recipe", RECIPES, ids=lambda path: path.name.removesuffix(".recipe.txt"))
def test_a_demo_recording_comes_out_of_its_recipe_again(tmp_path, monkeypatch, recipe):
    words = shlex.split(recipe.read_text())
    assert words[:2] == ["python", "tools/transmit.py"]
    made = Path(words[-1])
    assert made.parts[0] == "recordings"
    # the recipe runs from the top of the repository; here from a folder of the same layout
    monkeypatch.chdir(tmp_path)
    (tmp_path / "recordings").mkdir()
    assert main(words[2:]) == 0
    again = tmp_path / made
    if made.suffix == ".sigmf-meta":
        again, made = again.with_suffix(".sigmf-data"), made.with_suffix(".sigmf-data")
        assert again.read_bytes() == (ROOT / made).read_bytes()
    else:
        # samples, not bytes: what else stands in a sound file is its library's affair
        ours, theirs = (soundfile.read(io.BytesIO(path.read_bytes()), dtype="int16") for path in (again, ROOT / made))
        assert ours[1] == theirs[1]
        np.testing.assert_array_equal(ours[0], theirs[0])
    assert again.parent.joinpath(recipe.name).read_text() == recipe.read_text()
