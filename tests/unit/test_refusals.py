"""The table of refusals is closed, distinct and readable."""

from rtctl.wire import refusals
from rtctl.wire.refusals import REFUSALS, describe_refusal


def test_codes_are_negative_distinct_and_complete():
    """Each code constant of the module has exactly one entry, and none can be taken for a status or a length."""
    constants = {name: value for name, value in vars(refusals).items() if name.isupper() and isinstance(value, int)}
    codes = [refusal.code for refusal in REFUSALS]
    assert sorted(codes) == sorted(constants.values())
    assert len(set(codes)) == len(codes)
    assert all(code < 0 for code in codes)
    assert len({refusal.name for refusal in REFUSALS}) == len(codes)


def test_describe_refusal_says_name_and_sentence():
    """The handshake can say a refusal aloud, and an unknown code does not fail."""
    assert describe_refusal(refusals.TRAILING) == "trailing bytes: Bytes follow the last element."
    assert describe_refusal(-99) == "unknown refusal code -99"
    assert all(describe_refusal(refusal.code).endswith(".") for refusal in REFUSALS)
