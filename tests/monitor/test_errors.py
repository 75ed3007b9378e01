"""Errors are one line, and say with which status the program ends."""

import pytest

from monitor.errors import InputError, MonitorError, NothingToMeasure


def test_an_error_is_one_printable_line_whatever_a_file_name_holds():
    name = b"tide\xff\n\x1b[31m\tgauge".decode("utf-8", "surrogateescape")
    assert str(InputError(f"{name}: no such file")) == "tide\\udcff \\x1b[31m gauge: no such file"


@pytest.mark.parametrize(("kind", "status"), [(InputError, 2), (NothingToMeasure, 3)])
def test_each_error_knows_its_exit_status(kind, status):
    assert issubclass(kind, MonitorError)
    assert kind("x").exit_status == status
