"""What tests share; and a run ends with the worst errors that it found, beside what is promised."""

import accuracy
import pytest

import pydemap


@pytest.fixture(params=pydemap.available_isas())
def isa(request):
    """Each instruction-set level in turn, the one before restored."""
    before = pydemap.isa()
    pydemap.use_isa(request.param)
    yield request.param
    pydemap.use_isa(before)


def pytest_terminal_summary(terminalreporter):
    reports = [report for kind in ("passed", "failed") for report in terminalreporter.getreports(kind)]
    found = [value for report in reports for name, value in report.user_properties if name == "accuracy"]
    if found:
        terminalreporter.section("worst errors found, in units E of tests/accuracy.py")
        terminalreporter.write_line(accuracy.table(found))
