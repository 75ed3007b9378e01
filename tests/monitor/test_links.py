"""From the arguments of a command to those of each of its links."""

from pathlib import Path

import pytest

from monitor.cli import parser
from monitor.errors import InputError
from monitor.links import links_of, name_links


def parsed(*arguments, command="replay"):
    return links_of(parser().parse_args([command, *arguments]))


def test_one_source_is_one_link_with_plain_values():
    (link,) = parsed("a.iq", "--rate", "48000", "--format", "cf32", "--link", "gauge.toml", "--channels", "2")
    own = link.parsed
    assert (own.source, own.rate, own.format, own.link) == ("a.iq", 48000.0, "cf32", Path("gauge.toml"))
    assert own.channels == (2,)
    assert link.label == ""


def test_nothing_given_stays_nothing():
    (link,) = parsed("tcp://127.0.0.1:5555", command="watch")
    own = link.parsed
    assert (own.rate, own.format, own.topic, own.link, own.channels) == (None,) * 5


def test_each_source_is_a_link_and_what_was_given_once_holds_for_all():
    links = parsed("x/east.iq", "x/west.iq", "--rate", "1e6", "--format", "cf32", "--format", "ci16_le")
    assert [(one.parsed.source, one.parsed.rate, one.parsed.format) for one in links] == [
        ("x/east.iq", 1e6, "cf32"),
        ("x/west.iq", 1e6, "ci16_le"),
    ]
    assert [one.stream for one in links] == [0, 1]
    assert [one.label for one in links] == ["east", "west"]


def test_sources_of_one_name_in_two_folders_are_told_apart_by_their_paths():
    assert [one.label for one in parsed("east/rx.iq", "west/rx.iq")] == ["east/rx.iq", "west/rx.iq"]


def test_channels_are_links_and_with_iq_each_two():
    assert [one.parsed.channels for one in parsed("a.wav", "--channels", "1,3")] == [(1,), (3,)]
    assert [one.label for one in parsed("a.wav", "--channels", "1,3")] == ["channel 1", "channel 3"]
    assert [one.parsed.channels for one in parsed("a.wav", "--channels", "1,2", "--iq")] == [(1, 2)]
    pairs = parsed("a.wav", "--channels", "1,2,3,4", "--iq")
    assert [(one.parsed.channels, one.label) for one in pairs] == [
        ((1, 2), "channels 1 and 2"),
        ((3, 4), "channels 3 and 4"),
    ]


def test_sources_times_channels():
    links = parsed("a.wav", "b.wav", "--channels", "1,2")
    assert [one.label for one in links] == ["a, channel 1", "a, channel 2", "b, channel 1", "b, channel 2"]


def test_link_files_go_to_links_in_order_and_one_to_all():
    links = parsed("a.iq", "b.iq", "--link", "a.toml", "--link", "b.toml")
    assert [str(one.parsed.link) for one in links] == ["a.toml", "b.toml"]
    assert [str(one.parsed.link) for one in parsed("a.iq", "b.iq", "--link", "a.toml")] == ["a.toml", "a.toml"]


def test_several_link_files_with_one_stream_are_links_in_the_same_samples():
    links = parsed("a.iq", "--link", "low.toml", "--link", "high.toml")
    assert [(one.stream, str(one.parsed.link)) for one in links] == [(0, "low.toml"), (0, "high.toml")]


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["a", "b", "c", "--link", "1", "--link", "2"], "2 times for 3 links"),
        (["a", "b", "--rate", "1", "--rate", "2", "--rate", "3"], "--rate was given 3 times for 2 sources"),
        (["a", "--format", "cf32", "--format", "cu8"], "--format was given 2 times for 1 source"),
        (["-", "-"], "only once"),
        (["a.wav", "--channels", "2,2"], "each channel can be given once"),
        (["a.wav", "--channels", "1,2,3", "--iq"], "two channels for each link"),
    ],
)
def test_numbers_that_do_not_fit_are_refused(arguments, message):
    with pytest.raises(InputError, match=message):
        parsed(*arguments)


def test_no_two_links_have_one_name():
    assert name_links(["gauge", ""], ["east", "west"]) == ("gauge", "west")
    assert name_links(["gauge", "gauge"], ["east", "west"]) == ("gauge, east", "gauge, west")
    assert name_links(["gauge", "gauge"], ["", ""]) == ("gauge", "gauge (2)")
    assert name_links(["", ""], ["", ""]) == ("link 1", "link 2")
    assert len(set(name_links(["a", "a (2)", "a"], ["", "", ""]))) == 3
