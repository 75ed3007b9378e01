import math
from collections import Counter
from typing import get_args

import pytest

from monitor.views.control import (
    ACTIONS,
    DEFAULT_PERSISTENCE,
    HISTORY_STEPS,
    MENUS,
    PERSISTENCE_STEPS,
    TEXT_STEPS,
    ActionName,
    action_for,
    next_rail,
    persistence_words,
    step_history,
    step_persistence,
    step_text,
)


def test_no_key_does_two_things_and_every_action_has_a_key_and_a_menu():
    keys = Counter(key for action in ACTIONS for key in action.keys)
    assert max(keys.values()) == 1
    assert {action.name for action in ACTIONS} == set(get_args(ActionName))
    assert len(ACTIONS) == len(get_args(ActionName))
    assert all(action.keys and action.menu in MENUS for action in ACTIONS)


def test_what_is_wanted_often_lies_on_keys_that_a_glove_finds():
    large = {"Space", "Enter", "Backspace", "Tab", "Escape"}
    assert {action.keys[0] for action in ACTIONS} >= large
    assert {a.name for a in ACTIONS if a.keys[0] in large} == {"mark", "acknowledge", "clear", "rail", "hold"}


def test_ending_the_watch_needs_two_keys_at_once():
    (close,) = [action for action in ACTIONS if action.name == "close"]
    assert all(key.startswith("Ctrl+") for key in close.keys)


@pytest.mark.parametrize(
    ("key", "name"), [("Space", "mark"), ("n", "name"), ("N", "name"), ("h", "hold"), ("?", "help"), ("0", "newest")]
)
def test_a_key_finds_its_action_in_either_case(key, name):
    assert action_for(key).name == name


def test_other_keys_find_nothing():
    assert action_for("F12") is None
    assert action_for("space") is None
    assert action_for("") is None


@pytest.mark.parametrize(
    ("step", "steps"), [(step_persistence, PERSISTENCE_STEPS), (step_history, HISTORY_STEPS)], ids=["traces", "history"]
)
def test_steps_go_from_end_to_end_and_back_and_stay_there(step, steps):
    value, seen = steps[0], [steps[0]]
    for _ in range(len(steps) + 2):
        value = step(value, longer=True)
        seen.append(value)
    assert tuple(seen[: len(steps)]) == steps
    assert seen[len(steps) :] == [None] * 3
    for expected in (*steps[-2::-1], steps[0]):
        value = step(value, longer=False)
        assert value == expected


def test_a_persistence_between_two_steps_goes_to_the_nearest_on_that_side():
    assert step_persistence(3.0, longer=True) == 5.0
    assert step_persistence(3.0, longer=False) == 2.0
    assert DEFAULT_PERSISTENCE in PERSISTENCE_STEPS


def test_text_steps_stay_at_their_ends():
    assert step_text(1.0, larger=False) == 1.0
    assert step_text(1.0, larger=True) == TEXT_STEPS[1]
    assert step_text(TEXT_STEPS[-1], larger=True) == TEXT_STEPS[-1]


def test_persistence_is_told_in_words():
    assert [persistence_words(s) for s in (0.0, 0.5, 30.0, None)] == [
        "newest traces only",
        "traces fade in 0.5 s",
        "traces fade in 30 s",
        "traces stay",
    ]
    assert not any(math.isinf(step) for step in PERSISTENCE_STEPS if step is not None)


def test_rails_go_round():
    assert next_rail(None, ("I", "Q")) == 0
    assert next_rail(0, ("I", "Q")) == 1
    assert next_rail(1, ("I", "Q")) is None
    assert next_rail(1, ("",)) is None
