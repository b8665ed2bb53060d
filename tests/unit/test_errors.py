"""Errors in the words of the user."""

from rtctl.errors import ConfigError, Finding, ModelError, RtctlError, SetupError, WireError


def test_a_finding_says_where_what_why_and_what_next() -> None:
    """One line in the fixed order; what is not known is left out."""
    full = Finding("run.toml:3: rate_hz", ">= 10 Hz", "0.001", "It looks like a period.", "Write 1000.")
    assert str(full) == "run.toml:3: rate_hz: must be >= 10 Hz, got 0.001. It looks like a period. Write 1000."
    assert str(Finding("a", "b", "c")) == "a: must be b, got c."


def test_an_error_of_findings_says_all_of_them() -> None:
    """One line each, kept as data for --json."""
    findings = [Finding("a", "b", "c"), Finding("d", "e", "f")]
    error = ConfigError.from_findings(findings)
    assert str(error) == "a: must be b, got c.\nd: must be e, got f."
    assert error.findings == tuple(findings)
    assert isinstance(error, ConfigError)


def test_exit_codes_tell_bad_input_from_the_environment() -> None:
    """2 for what the user wrote, 3 for what the computer or the driver does not allow."""
    assert {kind: kind("x").exit_code for kind in (RtctlError, ConfigError, ModelError, SetupError, WireError)} == {
        RtctlError: 2,
        ConfigError: 2,
        ModelError: 2,
        SetupError: 3,
        WireError: 3,
    }
