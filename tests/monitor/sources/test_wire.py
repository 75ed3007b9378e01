"""Messages told from their bytes alone."""

import json
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from dsp.block import Block
from monitor.errors import InputError
from monitor.sources.formats import DATATYPES, parse_datatype
from monitor.sources.wire import FrameHeader, StreamEvent, WireState, begin, decode

RATE = 48000.0
RAMP = np.arange(1, 41, dtype="<f4") / 64


def bare(format_name="rf32_le", topic=""):
    return begin(RATE, format_name, topic)


def frame(sample, data=b"", stream="west", rate=RATE, form="rf32_le", **more):
    return [FrameHeader(stream, sample, rate, form, **more).to_bytes(), data]


def run(messages, state):
    """All items of the messages, and the state after them; the indices must follow one another."""
    items, position = [], state.next
    for parts in messages:
        got, state = decode(parts, state)
        items.extend(got)
        for item in got:
            if isinstance(item, Block):
                position += item.lost
                assert item.start == position
                assert item.samples.size > 0
                position += item.samples.size
            else:
                assert item.text.isprintable()
    assert state.next == position
    return items, state


def kinds(items):
    return ["block" if isinstance(item, Block) else item.kind for item in items]


def samples_of(items):
    return np.concatenate([item.samples for item in items if isinstance(item, Block)])


# --- headerless


@pytest.mark.parametrize("name", DATATYPES)
def test_a_headerless_message_is_samples_of_any_datatype(name):
    form = parse_datatype(name)
    rng = np.random.default_rng(7)
    data = rng.integers(1, 64, 12 * form.bytes_per_sample, dtype=np.uint8).tobytes()
    items, state = run([[data]], bare(name))
    assert kinds(items) == ["start", "block"]
    assert (items[0].rate_hz, items[0].format, items[0].sample) == (RATE, name, 0)
    np.testing.assert_array_equal(items[1].samples, form.decode(data).samples)
    assert state.samples == 12


@settings(deadline=None)
@given(cuts=st.lists(st.integers(0, 40), max_size=8))
def test_messages_of_any_size_join_to_the_whole(cuts):
    edges = [0, *sorted(cuts), 40]
    messages = [[RAMP[a:b].tobytes()] for a, b in pairwise(edges)]
    items, state = run(messages, bare())
    np.testing.assert_array_equal(samples_of(items), RAMP)
    assert (state.lost, state.torn, state.garbage) == (0, 0, 0)


def test_a_message_cut_inside_a_sample_loses_that_sample_and_no_more():
    data = RAMP.tobytes()
    items, state = run([[data[:43]], [data[44:]]], bare())
    assert kinds(items) == ["start", "block", "torn", "block"]
    assert "3 bytes left out" in items[2].text
    assert items[2].sample == 11
    assert items[3].lost == 1
    np.testing.assert_array_equal(samples_of(items), np.delete(RAMP, 10))
    assert (state.torn, state.lost, state.next) == (1, 1, 40)


def test_single_bytes_of_wide_samples_are_all_torn_and_counted():
    items, state = run([[b"\x01"]] * 5, bare("cf32_le"))
    assert kinds(items) == ["start"] + ["torn"] * 5
    assert (state.torn, state.samples, state.position) == (5, 0, 5)


def test_a_topic_before_the_samples_is_passed_over_as_a_part_and_as_a_prefix():
    data = RAMP.tobytes()
    items, _ = run([[b"west", data[:80]], [b"west" + data[80:]]], bare(topic="west"))
    np.testing.assert_array_equal(samples_of(items), RAMP)


def test_an_empty_message_is_nothing():
    items, state = run([[b""], [b"", b""]], bare())
    assert kinds(items) == ["start"]
    assert (state.messages, state.samples, state.garbage) == (2, 0, 0)


def test_bare_samples_without_rate_or_format_are_counted_as_unreadable():
    items, state = run([[RAMP.tobytes()]], begin())
    assert kinds(items) == ["garbage"]
    assert (state.unreadable, state.garbage, state.started) == (1, 1, False)


def test_an_unknown_format_is_refused_at_the_beginning():
    with pytest.raises(InputError, match="unknown sample format 'cf16'"):
        begin(RATE, "cf16")


# --- framed


def test_a_frame_says_all_there_is_to_know():
    time = "2031-05-04T12:00:02.000000Z"
    items, state = run([[b"west", *frame(96000, RAMP.tobytes(), time=time, centre_hz=169.4e6)]], begin())
    start, block = items
    wanted = ("start", 0, RATE, "rf32_le", 169.4e6)
    assert (start.kind, start.sample, start.rate_hz, start.format, start.centre_hz) == wanted
    assert (block.start, block.lost) == (0, 0)
    np.testing.assert_array_equal(block.samples, RAMP)
    assert (state.stream, state.expected, state.sent_at) == ("west", 96040, time)


@settings(deadline=None)
@given(kept=st.lists(st.booleans(), min_size=1, max_size=30), size=st.integers(1, 9))
def test_lost_samples_are_counted_exactly_whatever_messages_are_missing(kept, size):
    messages = [frame(1000 + i * size, np.full(size, i, "<f4").tobytes()) for i in range(len(kept))]
    arrived = [m for m, keep in zip(messages, kept, strict=True) if keep]
    items, state = run(arrived, begin())
    blocks = [item for item in items if isinstance(item, Block)]
    numbers = [i for i, keep in enumerate(kept) if keep]
    # in time with the sender: every block lies where its number says, counted from the first that arrived
    assert [block.start for block in blocks] == [(i - numbers[0]) * size for i in numbers]
    between = (numbers[-1] - numbers[0] + 1 - len(numbers)) * size if numbers else 0
    assert sum(block.lost for block in blocks) == state.lost == between


def test_a_loss_announced_by_an_empty_frame_is_told_with_the_next_samples():
    items, state = run([frame(0, RAMP.tobytes()), frame(140), frame(200, RAMP.tobytes())], begin())
    assert kinds(items) == ["start", "block", "block"]
    assert (items[2].lost, items[2].start, state.lost) == (160, 200, 160)


def test_a_torn_frame_is_followed_by_the_exact_loss():
    items, state = run([frame(0, RAMP.tobytes()[:-6]), frame(40, RAMP.tobytes())], begin())
    assert kinds(items) == ["start", "block", "torn", "block"]
    assert (items[1].samples.size, items[3].lost, items[3].start) == (38, 2, 40)
    assert (state.torn, state.lost) == (1, 2)


def test_an_index_that_goes_back_and_a_new_stream_are_restarts():
    data = RAMP.tobytes()
    items, state = run([frame(5000, data), frame(0, data), frame(0, data, stream="west-2")], begin())
    assert kinds(items) == ["start", "block", "restart", "block", "restart", "block"]
    assert [item.sample for item in items if isinstance(item, StreamEvent)] == [0, 40, 80]
    assert all(item.lost == 0 for item in items if isinstance(item, Block))
    assert (state.restarts, state.lost) == (2, 0)
    assert (items[4].rate_hz, items[4].format) == (RATE, "rf32_le")


def test_a_leap_of_years_is_a_restart_not_a_loss():
    items, state = run([frame(0, RAMP.tobytes()), frame(1 << 61, RAMP.tobytes())], begin())
    assert kinds(items)[2] == "restart"
    assert (state.lost, state.next) == (0, 80)


def test_changes_of_rate_format_and_centre_are_told_before_the_samples_they_hold_for():
    ints = np.arange(80, dtype="<i2")
    items, _ = run(
        [
            frame(0, RAMP.tobytes()),
            frame(40, RAMP.tobytes(), rate=96000.0),
            frame(80, ints.tobytes(), rate=96000.0, form="ci16_le", centre_hz=1e6),
        ],
        begin(),
    )
    assert kinds(items) == ["start", "block", "rate", "block", "format", "centre", "block"]
    assert (items[2].rate_hz, items[2].format, items[2].sample) == (96000.0, "rf32_le", 40)
    assert (items[4].rate_hz, items[4].format, items[5].centre_hz) == (96000.0, "ci16_le", 1e6)
    assert items[6].samples.dtype == np.complex64


def test_what_the_user_says_wins_over_the_frame_and_the_contradiction_is_told():
    items, state = run([frame(0, RAMP.tobytes(), rate=96000.0, form="ri16_le")], bare())
    assert "it says 96000 Hz, --rate 48000 is used" in items[0].text
    assert "it says ri16_le, --format rf32_le is used" in items[0].text
    assert state.rate_hz == RATE
    np.testing.assert_array_equal(items[1].samples, RAMP)


def test_a_second_sender_is_left_out_and_taken_once_it_is_alone():
    data = RAMP.tobytes()
    a = [frame(40 * i, data, stream="a") for i in range(80)]
    b = [frame(40 * i, data, stream="b") for i in range(3)]
    items, state = run([a[0], b[0], a[1], b[1], a[2], b[2]], begin())
    assert kinds(items) == ["start", "block", "restart", "block", "garbage", "block", "garbage", "block"]
    items, state = run(a[3:60], state)
    assert kinds(items).count("restart") == 1
    assert kinds(items)[-1] == "block"
    assert state.stream == "a"


def test_a_sender_that_turns_to_bare_samples_is_followed_if_rate_and_format_are_given():
    data = RAMP.tobytes()
    items, _ = run([frame(0, data), [data]], bare())
    assert kinds(items) == ["start", "block", "restart", "block"]
    items, state = run([frame(0, data), [data]], begin())
    assert kinds(items) == ["start", "block", "garbage"]
    assert state.unreadable == 1


def header(**changes):
    fields = {"lidwatch": 1, "stream": "west", "sample": 0, "rate_hz": RATE, "format": "rf32_le", **changes}
    return json.dumps({key: value for key, value in fields.items() if value is not ...}).encode()


@pytest.mark.parametrize(
    ("head", "why"),
    [
        (b'{"lidwatch": 1', "not JSON"),
        (b'{"lidwatch": ' + b"[" * 50000, "not JSON"),
        (b'{"lidwatch": 1, "\xff": 2}', "not JSON"),
        (header(lidwatch=2), "version 2"),
        (header(lidwatch=True), "version True"),
        (header(stream=5), "stream id"),
        (header(stream="x" * 257), "stream id"),
        (header(sample=-1), "sample index"),
        (header(sample=True), "sample index"),
        (header(sample=1.5), "sample index"),
        (header(sample=1 << 62), "sample index"),
        (header(sample=...), "sample index"),
        (header(rate_hz=0), "rate_hz"),
        (header(rate_hz=float("nan")), "rate_hz"),
        (header(rate_hz=10**400), "rate_hz"),
        (header(rate_hz="48000"), "rate_hz"),
        (header(format="cf16"), "SigMF"),
        (header(format=None), "SigMF"),
    ],
    ids=lambda value: value if isinstance(value, str) else "",
)
def test_a_frame_that_cannot_be_read_is_left_out_and_says_why(head, why):
    items, state = run([frame(0, RAMP.tobytes()), [head, RAMP.tobytes()], frame(40, RAMP.tobytes())], begin())
    assert kinds(items) == ["start", "block", "garbage", "block"]
    assert why in items[2].text
    assert (state.garbage, state.lost) == (1, 0)


def test_a_time_or_centre_of_no_use_is_ignored():
    items, state = run([[header(time="yesterday", centre_hz="low"), RAMP.tobytes()]], begin())
    assert kinds(items) == ["start", "block"]
    assert (state.sent_at, state.centre_hz) == (None, None)


def test_names_from_the_wire_cannot_reach_the_terminal_as_control_characters():
    items, _ = run([frame(0, RAMP.tobytes()), frame(0, RAMP.tobytes(), stream="\x1b[2Jgone")], begin())
    assert "\\x1b[2Jgone" in items[2].text


json_values = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=10),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=8), inner, max_size=3),
    max_leaves=6,
)
field_names = st.sampled_from(["lidwatch", "stream", "sample", "rate_hz", "format", "time", "centre_hz"])
near_headers = st.dictionaries(field_names, json_values).map(lambda d: json.dumps({"lidwatch": 1, **d}).encode())
good_headers = st.builds(
    lambda stream, sample, form: FrameHeader(stream, sample, RATE, form).to_bytes(),
    st.sampled_from("ab"),
    st.integers(0, 200),
    st.sampled_from(DATATYPES),
)
anything = st.lists(st.lists(st.binary(max_size=40) | near_headers | good_headers, max_size=4), min_size=1, max_size=12)


@settings(deadline=None, max_examples=100)
@given(messages=anything, given_format=st.sampled_from([None, "cu8", "cf64_be", "ri16_le"]))
def test_no_bytes_whatsoever_raise_and_every_message_is_counted(messages, given_format):
    state = begin(None if given_format is None else RATE, given_format, "ab")
    items, after = run(messages, state)
    assert isinstance(after, WireState)
    assert after.messages == len(messages)
    assert kinds(items).count("garbage") == after.garbage
    assert kinds(items).count("torn") == after.torn
    assert sum(item.samples.size for item in items if isinstance(item, Block)) == after.samples
    first = next((k for k in kinds(items) if k != "garbage"), "start")
    assert first == "start"
    for item in items:
        if isinstance(item, Block):
            assert np.isfinite(item.samples.view(np.float32)).all()
