"""What must fit together across the tables of a description."""

from __future__ import annotations

from collections.abc import Iterator

from platewatch.adapters.settings_draft import Draft
from platewatch.adapters.settings_schema import Mistake, value_mistakes


def mistakes(read: Draft) -> Iterator[Mistake]:
    """Everything wrong with values, names and places."""
    for where, entry in read.entries:
        for mistake in value_mistakes(entry, read.unit):
            yield mistake.below(where)
