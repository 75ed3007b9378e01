import pytest
from hypothesis import given
from hypothesis import strategies as st

from monitor.views.control import ACTIONS
from monitor.views.terminal_keys import Keys


def keys_of(*parts):
    keys = Keys()
    found = [key for part in parts for key in keys.feed(part)]
    return found + keys.settle()


@pytest.mark.parametrize(
    ("data", "key"),
    [
        (b" ", "Space"),
        (b"\r", "Enter"),
        (b"\t", "Tab"),
        (b"\x7f", "Backspace"),
        (b"\x08", "Backspace"),
        (b"\x1b", "Escape"),
        (b"\x11", "Ctrl+Q"),
        # cursor and function keys as XTerm's list of control sequences has them, normal and application mode; from memory
        (b"\x1b[A", "Up"),
        (b"\x1bOA", "Up"),
        (b"\x1b[B", "Down"),
        (b"\x1bOP", "F1"),
        (b"\x1b[5~", "PageUp"),
        (b"\x1b[6~", "PageDown"),
        (b"\x1b[11~", "F1"),
        # the Linux console, console_codes(4); from memory
        (b"\x1b[[A", "F1"),
        ("ß".encode(), "ß"),
    ],
)
def test_each_key_is_known_by_what_terminals_send(data, key):
    assert keys_of(data) == [key]


def test_every_action_of_a_terminal_has_a_key_that_can_be_sent():
    sendable = {"Space", "Enter", "Tab", "Backspace", "Escape", "Up", "Down", "F1"}
    for action in ACTIONS:
        assert action.window_only or any(
            len(key) == 1 or key in sendable or key.startswith("Ctrl+") for key in action.keys
        ), action.name


@pytest.mark.parametrize(
    "data", [b"\x1b[1;5A", b"\x1b[200", b"\x1b[?62;c", b"\x1bx", b"\xff\xfe", b"\x1b[99~", b"\x00"]
)
def test_what_is_no_key_of_ours_presses_nothing(data):
    assert keys_of(data) == []


def test_pasted_text_comes_as_one_piece_whatever_it_holds():
    assert keys_of(b"a\x1b[200~b \x1b[A\r\x11\x1b[201~c") == ["a", ("paste", "b \r\x11"), "c"]


def test_two_escapes_are_two_keys():
    assert keys_of(b"\x1b\x1b") == ["Escape", "Escape"]


def test_an_escape_waits_for_what_may_follow():
    keys = Keys()
    assert keys.feed(b"\x1b") == []
    assert keys.waiting
    assert keys.feed(b"[B") == ["Down"]
    assert not keys.waiting


@given(
    st.lists(
        st.sampled_from([b"a", b"\x1b[A", b"\x1bOP", "é漢".encode(), b"\x1b[200~x y\x1b[201~", b"\r", b"\x1b[1;2D"])
    ),
    st.data(),
)
def test_keys_do_not_depend_on_how_the_bytes_are_cut(pieces, data):
    whole = b"".join(pieces)
    cuts = sorted(data.draw(st.lists(st.integers(0, len(whole)), max_size=8)))
    parts = [whole[a:b] for a, b in zip([0, *cuts], [*cuts, len(whole)], strict=True)]
    assert keys_of(*parts) == keys_of(whole)
