"""How many messages a second a topic may bring."""

from __future__ import annotations

from dataclasses import dataclass

MOST_A_SECOND = 100  # far more than a thermocouple has to say
BURST = 20_000  # what may come at once, such as a broker's whole store


@dataclass(slots=True)
class _Bucket:
    left: float
    seen_us: int
    at_us: int


class TopicPace:
    """Lets through what a plant may say, and holds a runaway source to a rate.

    A bucket for each topic, filled by time as it passes here and as the messages state it:
    the backlog of an outage comes at once, but tells of hours, and passes whole.  So it
    bounds a source that repeats itself, not one that invents its stamps.
    """

    def __init__(self, most_a_second: float = MOST_A_SECOND, burst: float = BURST) -> None:
        self.most_a_second, self._burst = most_a_second, burst
        self._buckets: dict[str, _Bucket] = {}

    def allows(self, topic: str, seen_us: int, at_us: int) -> bool:
        """May one more message of this topic be used?  Counts it if so.

        topic: one of a known set;  at_us: its newest stamp, or its arrival
        """
        bucket = self._buckets.get(topic)
        if bucket is None:
            bucket = self._buckets[topic] = _Bucket(self._burst, seen_us, at_us)
        passed_us = max(seen_us - bucket.seen_us, abs(at_us - bucket.at_us), 0)
        bucket.left = min(self._burst, bucket.left + passed_us * self.most_a_second / 1e6)
        bucket.seen_us, bucket.at_us = seen_us, at_us
        if bucket.left < 1:
            return False
        bucket.left -= 1
        return True
