"""How what is typed becomes values."""

import argparse

import pytest

from monitor import arguments
from monitor.arguments import join_negative_numbers


@pytest.mark.parametrize(
    ("typed", "joined"),
    [
        (["--carrier", "-1e3"], ["--carrier=-1e3"]),
        (["--carrier", "-500", "x.wav"], ["--carrier=-500", "x.wav"]),
        (["--carrier", "-inf"], ["--carrier=-inf"]),
        (["--carrier=5", "-1"], ["--carrier=5", "-1"]),
        (["-", "--rate", "5"], ["-", "--rate", "5"]),
        (["--rate", "-"], ["--rate", "-"]),
        (["-5"], ["-5"]),
        ([], []),
    ],
)
def test_negative_numbers_stay_with_their_option(typed, joined):
    assert join_negative_numbers(typed) == joined


@pytest.mark.parametrize(
    ("take", "text", "value"),
    [
        ("number", "-1e3", -1000.0),
        ("positive", "0.5", 0.5),
        ("not_negative", "0", 0.0),
        ("positive_or_auto", "auto", None),
        ("positive_or_auto", "9600", 9600.0),
        ("number_or_auto", "auto", None),
        ("number_or_auto", "-9.5", -9.5),
        ("bandwidth", "1e-5", 1e-5),
        ("bandwidth", "0.05", 0.05),
        ("error_rate", "1e-15", 1e-15),
        ("whole", "1000000000", 10**9),
        ("channels", "1", (1,)),
        ("channels", "2,1", (2, 1)),
        ("size", "640x400", (640, 400)),
        ("size", "7680X4320", (7680, 4320)),
    ],
)
def test_values_are_taken(take, text, value):
    assert getattr(arguments, take)(text) == value


@pytest.mark.parametrize(
    ("take", "text", "says"),
    [
        ("number", "fast", "must be a number, got 'fast'"),
        ("number", "", "must be a number"),
        ("number", "nan", "must be finite"),
        ("number", "1e400", "must be finite"),
        ("positive", "0", "must be above 0"),
        ("positive", "-3", "must be above 0"),
        ("positive_or_auto", "inf", "must be finite"),
        ("not_negative", "-0.1", "must be 0 or above"),
        ("bandwidth", "0.051", "between 1e-05 and 0.05"),
        ("error_rate", "0.5", "between 1e-15 and 0.5"),
        ("error_rate", "0", "between 1e-15 and 0.5"),
        ("whole", "0", "whole number from 1 to 1000000000"),
        ("whole", "2.5", "whole number"),
        ("whole", "1000000001", "whole number"),
        ("whole", "9" * 5000, "whole number"),
        ("channels", "1,", "whole number"),
        ("size", "1280", "must look like 1280x800"),
        ("size", "x", "must look like"),
        ("size", "²x³", "must look like"),
        ("size", "9" * 5000 + "x1", "must look like"),
        ("size", "100x100", "between 640x400 and 7680x4320"),
        ("size", "8000x800", "between 640x400 and 7680x4320"),
    ],
)
def test_mistakes_are_named(take, text, says):
    with pytest.raises(argparse.ArgumentTypeError, match=says):
        getattr(arguments, take)(text)
