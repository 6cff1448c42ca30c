"""Comparison with a number as somebody printed it: right to the last digit, which is the tolerance that the source itself claims."""

from __future__ import annotations

from decimal import Decimal


def assert_prints_as(found: float, printed: str) -> None:
    """`found`, rounded to the last decimal place of `printed`, is `printed` (a tie may go either way)."""
    expected = Decimal(printed)
    place = expected.as_tuple().exponent
    assert isinstance(place, int)
    half_a_unit = Decimal("0.5").scaleb(place)
    # 1e-12: the tie itself cannot be told apart in binary
    assert abs(Decimal(repr(float(found))) - expected) <= half_a_unit * (1 + Decimal("1e-12")), f"{found!r} does not print as {printed}"
