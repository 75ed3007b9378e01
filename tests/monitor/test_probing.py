"""The command ``lidwatch probe``: any source, what is told of it, and the link file that comes of it."""

import contextlib
import subprocess
import time
import tomllib
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import zmq

from dsp.identify import Findings, FoundLink, Identified
from dsp.identify.findings import Guess
from dsp.link import Link, find_scheme
from dsp.pulses import Pulse
from monitor import probing
from monitor.cli import main, parser
from monitor.errors import NothingToMeasure
from monitor.linkfile import LinkOptions, link_file_text, read_link_file
from monitor.listening import Heard
from monitor.probe_report import document, link_file_texts, nominal_rate, text
from tests.monitor.recordings import RAW, one_line, pam2, qpsk, raw, run_program, start_program, strict_json, wav_bytes
from tests.monitor.sending import frame
from tests.monitor.sources.conftest import senders

__all__ = ["senders"]


def found(scheme="qpsk", rate=12000.1, pulse="rrc:0.35", carrier=12.3456, **more):
    link = Link(find_scheme(scheme), 48000.0, rate, Pulse.parse(pulse))
    return FoundLink(
        Identified(link, 0.0, None, ("scheme",)),
        Guess(rate, 0.99),
        Guess(find_scheme(scheme), 0.97, find_scheme("8psk")),
        Guess(Pulse.parse(pulse), 0.9, Pulse.parse("rrc:0.3")),
        None if carrier is None else Guess(carrier, 0.95),
        more.pop("snr_db", 21.26),
        10.0,
        16200.0,
        -3.0,
        **more,
    )


def findings(*links, **more):
    known = Findings(links, "" if links else "no clock line", 2.0, -3.0, -0.1, 0.01 - 0.02j, 0.5)
    return replace(known, **more)


def heard(size=96_000, **more):
    known = Heard(np.zeros(size, np.complex64), "skerry.iq", "cf32_le", 48000.0, 1.5, 0, 0, 0, ())
    return replace(known, **more)


# --- what is said


def test_each_part_stands_with_its_confidence_and_the_next_best():
    lines = list(text(heard(), findings(found(mirrored=True, notes=("the tail of a burst",)))))
    table = {line[2:16].strip(): line[16:] for line in lines if line.startswith("  ")}
    assert table["Scheme"].split() == ["qpsk", "97", "%", "8psk"]
    assert table["Symbol rate"].split() == ["12000.1", "Bd", "99", "%"]
    assert table["Pulse"].split() == ["rrc:0.35", "90", "%", "rrc:0.3"]
    assert table["Carrier"].split()[0] == "+12.3"
    assert table["SNR"].strip() == "21.3 dB"
    assert table["I and Q"].strip() == "look swapped"
    assert "  note: the tail of a burst" in lines
    assert lines[0] == "skerry.iq: cf32_le, 48000 Hz; 2.000 s from 1.500 s"
    assert lines[1] == "level −3.0 dBFS, peak −0.1 dBFS, clipped 0.50 %, DC +1.00 % (I) −2.00 % (Q)"


def test_several_links_are_told_apart_and_what_is_not_known_is_not_invented():
    lines = list(text(heard(), findings(found(), found("pam2", carrier=None, snr_db=None))))
    assert sum(line.startswith(("link 1 of 2", "link 2 of 2")) for line in lines) == 2
    assert sum("Carrier" in line for line in lines) == 1
    assert any(line.split() == ["SNR", "not", "known"] for line in lines)
    assert not any("swapped" in line or "Tone" in line for line in lines)


def test_the_document_has_every_part_and_null_for_what_is_not_known():
    own = document(heard(clipped=960), findings(found(), found("pam2", carrier=None, snr_db=None)))
    assert own["samples"]["clipped_pct"] == 1.0
    assert own["samples"]["dc_pct"] == [1.0, -2.0]
    first, second = own["links"]
    assert first["scheme"] == {"value": "qpsk", "confidence": 0.97, "runner_up": "8psk"}
    assert first["symbol_rate_hz"] == {"value": 12000.1, "confidence": 0.99, "runner_up": None}
    assert (second["carrier_hz"], second["snr_db"], second["iq_swapped"]) == (None, None, None)
    assert document(heard(), findings())["reason"] == "no clock line"


def test_a_real_recording_has_one_dc():
    real = heard(samples=np.zeros(10, np.float32))
    assert document(real, findings(dc=0.03 + 0j))["samples"]["dc_pct"] == [3.0]


def test_silence_is_called_so():
    lines = list(text(heard(), findings(level_dbfs=None, peak_dbfs=None)))
    assert lines[1] == "silence: all samples are 0"


# --- the link file


def test_the_link_file_reads_back_as_what_was_found(tmp_path):
    path = tmp_path / "link.toml"
    (content,) = link_file_texts(heard(), findings(found()), LinkOptions(name="Skerry “east”\n"))
    path.write_text(content, encoding="utf-8")
    file = read_link_file(path)
    assert file.link == LinkOptions(12000.0, "qpsk", "rrc:0.35", 12.3, None, None, "Skerry “east”\n")
    assert file.alarms == ()
    assert "measured 12000.1, +8.3 ppm" in content


def test_its_example_limits_are_limits_once_their_signs_are_taken_away(tmp_path):
    from monitor.alarm_rules import parse_rules

    (content,) = link_file_texts(heard(), findings(found()), LinkOptions())
    head, _, limits = content.partition("# Limits")
    bare = head + "\n".join(line.removeprefix("# ") for line in limits.splitlines()[1:])
    rules = parse_rules(tomllib.loads(bare)["alarm"])
    # six dB below what was measured
    assert [rule.text for rule in rules] == ["opening_pct < 40", "snr_db < 15"]


def test_each_of_several_links_gets_a_file_with_a_name_of_its_own(tmp_path):
    texts = link_file_texts(heard(), findings(found(), found(carrier=-6000.0)), LinkOptions())
    tables = [tomllib.loads(content)["link"] for content in texts]
    assert [table["name"] for table in tables] == ["link 1", "link 2"]
    assert [table["carrier_hz"] for table in tables] == [12.3, -6000.0]


def test_what_is_more_guessed_than_known_is_left_to_be_found_unless_it_was_given():
    doubtful = replace(found(), pulse=Guess(Pulse.parse("rect"), 0.2, Pulse.parse("rrc:0.4")))
    (content,) = link_file_texts(heard(), findings(doubtful), LinkOptions())
    assert "pulse" not in tomllib.loads(content)["link"]
    assert '# pulse = "rect"  # 20 % sure, else rrc:0.4' in content
    (content,) = link_file_texts(heard(), findings(doubtful), LinkOptions(pulse="rect"))
    assert tomllib.loads(content)["link"]["pulse"] == "rect"


@pytest.mark.parametrize(
    ("measured", "nominal"),
    [
        (9600.2, 9600.0),
        (1199.97, 1200.0),
        (45.4502, 45.45),
        (270_833.9, 1625e3 / 6),
        (250_010.0, 250_000.0),
        (1_000_040.0, 1_000_000.0),
        (9611.0, 9611.0),
        (12_345.6, 12_345.6),
    ],
)
def test_a_rate_next_to_a_round_or_usual_one_is_taken_for_it(measured, nominal):
    assert nominal_rate(measured)[0] == pytest.approx(nominal, rel=1e-12)


@pytest.mark.parametrize("number", [0.0, 9600.0, -12.5, 1e-5, 1e16, 1625e3 / 6, np.float64(64974.3)])
def test_any_number_survives_the_file(tmp_path, number):
    path = tmp_path / "l.toml"
    path.write_text(link_file_text(LinkOptions(carrier_hz=number)))
    assert read_link_file(path).link.carrier_hz == number


@pytest.mark.parametrize("name", ['a "quoted" \\ name', "tab\there", "line\nbreak", "émeraude 海", "\x7f"])
def test_any_name_survives_the_file(tmp_path, name):
    path = tmp_path / "l.toml"
    path.write_text(link_file_text(LinkOptions(name=name), head=("two\nlines # here",)), encoding="utf-8")
    assert read_link_file(path).link.name == name


# --- how long it listens


class Ear:
    def __init__(self, *heard):
        self.heard, self.asked = list(heard), []

    def listen(self, seconds):
        self.asked.append(seconds)
        return self.heard.pop(0)


@pytest.fixture
def answers(monkeypatch):
    given = []
    monkeypatch.setattr("dsp.identify.survey_links", lambda *_: given.pop(0))
    return given


def test_it_listens_on_where_it_is_not_sure(answers):
    unsure = found()
    answers += [findings(replace(unsure, scheme=Guess(unsure.scheme.value, 0.5))), findings(unsure)]
    ear = Ear(heard(96_000), heard(384_000))
    got, what = probing.look(ear, None, (2.0, 8.0))
    assert (ear.asked, got.seconds) == ([2.0, 8.0], 8.0)
    assert what.links[0].scheme.confidence == 0.97


def test_it_stops_where_it_is_sure_or_was_told_how_long(answers):
    answers += [findings(found()), findings()]
    assert probing.look(ear := Ear(heard()), None, (2.0, 8.0))[1].links
    assert ear.asked == [2.0]
    assert not probing.look(ear := Ear(heard(24_000)), None, (0.5,))[1].links
    assert ear.asked == [0.5]


def test_what_was_heard_first_stands_where_the_source_ends_meanwhile(answers):
    answers += [findings(replace(found(), snr_db=7.0, scheme=Guess(find_scheme("qpsk"), 0.5)))]
    got, what = probing.look(Ear(heard(), heard(0)), None, (2.0, 8.0))
    assert (got.seconds, what.links[0].snr_db) == (2.0, 7.0)
    with pytest.raises(NothingToMeasure, match="no samples"):
        probing.look(Ear(heard(0)), None, (2.0,))


# --- the command, on real sources


def right(links):
    (link,) = links
    assert link["scheme"]["value"] == "qpsk"
    assert link["symbol_rate_hz"]["value"] == pytest.approx(12000, rel=20e-6)
    assert link["pulse"]["value"] == "rrc:0.35"


def test_a_recording_is_probed_and_its_link_file_measures_it(tmp_path, capsys):
    path, link = raw(tmp_path, qpsk(30_000)), tmp_path / "link.toml"
    assert main(["probe", path, *RAW, "--json", "--save", str(link)]) == 0
    own = strict_json(capsys.readouterr().out)
    right(own["links"])
    assert own["source"]["seconds"] >= 2.0
    assert main(["replay", path, *RAW, "--link", str(link), "--json"]) == 0
    measured = strict_json(capsys.readouterr().out)
    assert "scheme" not in measured["link"]["identified"]
    assert measured["link"]["symbol_rate_hz"] == 12000.0
    assert measured["reading"]["snr_db"] == pytest.approx(25, abs=0.5)


def test_a_channel_and_a_stretch_of_a_sound_file(tmp_path, capsys):
    path = tmp_path / "two.wav"
    path.write_bytes(wav_bytes(np.column_stack([0 * pam2(36_000), pam2(36_000)])))
    assert main(["probe", str(path), "--channels", "2", "--start", "1", "--for", "1.5", "--json"]) == 0
    own = strict_json(capsys.readouterr().out)
    assert (own["source"]["start_s"], own["source"]["seconds"]) == (1.0, 1.5)
    assert own["links"][0]["scheme"]["value"] == "pam2"
    assert own["links"][0]["carrier_hz"] is None


def test_standard_input_is_probed_though_it_ends_before_it_is_sure():
    status, out, err = run_program("probe", "-", *RAW, "--json", stdin=qpsk(30_000).tobytes())
    assert (status, err) == (0, "")
    right(strict_json(out)["links"])


def test_a_socket_is_probed(senders, tmp_path):
    push, uri = senders(zmq.PUSH, sndtimeo=60_000)
    program = start_program("probe", uri, "--socket", "pull", "--for", "1", "--json", stdout=subprocess.PIPE)
    try:
        samples = qpsk(30_000)
        for number in range(100):
            at = number * 4800 % samples.size
            with contextlib.suppress(zmq.Again):
                push.send_multipart(frame(samples[at : at + 4800], number * 4800))
            if program.poll() is not None:
                break
            push.sndtimeo = 100 if number else 60_000
            time.sleep(0.1)
        out, _ = program.communicate(timeout=30)
    finally:
        program.kill()
        program.wait()
    assert program.returncode == 0
    own = strict_json(out.decode())
    right(own["links"])
    assert own["source"]["seconds"] == 1.0


def test_where_nobody_sends_it_gives_up_with_status_3(tmp_path):
    status, out, err = run_program("probe", f"ipc://{tmp_path}/nobody", "--wait", "0.3")
    assert (status, out) == (3, "")
    assert "no samples came in 0.3 s" in one_line(err)


def test_noise_is_no_link_and_says_so_with_status_3(tmp_path, capsys):
    noise = np.random.default_rng(1).normal(size=(96_000, 2)).astype(np.float32).view(np.complex64).ravel()
    link = tmp_path / "link.toml"
    assert main(["probe", raw(tmp_path, noise * 0.1), *RAW, "--json", "--save", str(link)]) == 3
    out, err = capsys.readouterr()
    own = strict_json(out)
    assert own["links"] == []
    assert own["reason"] in one_line(err)
    assert not link.exists()


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["there.iq", *RAW, "--save", "there.iq"], "is there already"),
        (["there.iq", *RAW, "--save", "no/such/link.toml"], "there is no folder"),
        (["there.iq", *RAW, "--save", "."], "is a folder"),
        (["no-such.wav"], "no such file"),
        (["there.iq", *RAW, "--for", "0"], "--for"),
        (["there.iq", "more.iq"], "unrecognized arguments: more.iq"),
        (["there.wav", "--channels", "1,2"], "one stream"),
        (["there.iq"], "raw samples need --format NAME"),
        (["tcp://127.0.0.1"], "needs a host and a port"),
        (["tcp://127.0.0.1:5555", "--start", "1"], "are of recordings"),
        (["tcp://127.0.0.1:5555", "--server-key", "x.key"], "go with --key"),
        (["-"], "raw samples need"),
    ],
)
def test_what_cannot_be_is_one_line_and_status_2(capsys, tmp_path, monkeypatch, arguments, message):
    monkeypatch.chdir(tmp_path)
    raw(tmp_path, qpsk(100), "there.iq")
    Path("there.wav").write_bytes(wav_bytes(np.zeros((100, 2), np.float32)))
    assert main(["probe", *arguments]) == 2
    out, err = capsys.readouterr()
    assert out == ""
    assert message in one_line(err)


def test_a_second_file_that_is_there_keeps_the_first_from_being_written(tmp_path):
    (tmp_path / "l-2.toml").write_text("mine")
    from monitor.errors import InputError

    with pytest.raises(InputError, match=r"l-2\.toml.*is there already"):
        probing._save(tmp_path / "l.toml", ["a", "b"])
    assert not (tmp_path / "l.toml").exists()


def test_every_option_is_in_the_help(capsys):
    with pytest.raises(SystemExit):
        parser().parse_args(["probe", "--help"])
    out = capsys.readouterr().out
    assert all(option in out for option in ("--for", "--wait", "--json", "--save", "--start", "--socket", "--scheme"))
