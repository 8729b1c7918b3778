"""Words for the state of one element of an answer: one byte each inside, the lower-case name outside."""

from __future__ import annotations

from enum import IntEnum

__all__ = ["Payoff", "Status"]


class Status(IntEnum):
    """Why a number is there, or why it is not."""

    OK = 0
    BELOW_INTRINSIC = 1  # price under the no-arbitrage lower bound
    ABOVE_MAXIMUM = 2  # price at or over the no-arbitrage upper bound
    ZERO_TIME_VALUE = 3  # price equal to the lower bound, or its excess is below the smallest double
    NOT_FINITE = 4  # a NaN or an infinity came in
    EXPIRED = 5  # expiry is zero or negative
    TOLERANCE_NOT_MET = 6  # the number is there, its bound exceeds what was asked for
    NO_QUOTE = 7  # nothing was quoted

    @property
    def word(self) -> str:
        """The name as it appears in answers, e.g. ``"below_intrinsic"``."""
        return self.name.lower()


class Payoff(IntEnum):
    """What is paid at expiry. ``OTM`` is resolved against the forward: a call where strike >= forward, else a put."""

    CALL = 0
    PUT = 1
    OTM = 2
    DIGITAL_CALL = 3
    DIGITAL_PUT = 4

    @property
    def word(self) -> str:
        return self.name.lower()
