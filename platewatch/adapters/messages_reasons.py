"""Why something received is not used."""

from __future__ import annotations

from enum import StrEnum


class Reason(StrEnum):
    """Why something was refused; refusals are counted by it."""

    TOO_LARGE = "too large"
    TOO_OFTEN = "too many messages"
    NOT_JSON = "not valid JSON"
    NOT_A_NUMBER = "not a number"
    NO_VALUE = "no value at the declared place"
    BAD_TIME = "unreadable time"
    FUTURE = "stamped in the future"
    OUT_OF_RANGE = "outside the range of its channel"
    UNKNOWN_CHANNEL = "unknown channel"
    UNKNOWN_TOPIC = "unknown topic"
    MAPPED = "mapped to another topic"
    DOUBLED = "said twice in one message"
    WRONG_UNIT = "wrong unit"
    BAD_EVENT = "unreadable batch event"
    STALE_EVENT = "retained batch event"


class Unreadable(Exception):
    """Internal to the decoding; never leaves `messages`."""

    def __init__(self, reason: Reason, detail: str) -> None:
        super().__init__(detail)
        self.reason = reason
        self.detail = detail
