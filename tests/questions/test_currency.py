"""Whether heads are found right.  Pure."""

from __future__ import annotations

import pytest

from registry.questions.currency import heads


@pytest.mark.parametrize(
    ("after", "withdrawn", "expected"),
    [
        ({}, set(), {1, 2, 3}),
        ({2: {1}, 3: {2}}, set(), {3}),
        ({2: {1}, 3: {2}}, {3}, {2}),
        ({2: {1}, 3: {2}}, {2}, {3}),
        ({2: {1}, 3: {2}}, {2, 3}, {1}),
        ({2: {1}, 3: {1}}, set(), {2, 3}),
        ({3: {1, 2}}, set(), {3}),
        ({3: {1, 2}}, {3}, {1, 2}),
        ({2: {1}, 3: {1, 2}}, {1}, {3}),
        ({}, {1, 2, 3}, set()),
    ],
)
def test_heads_are_what_no_unwithdrawn_record_supersedes(
    after: dict[int, set[int]], withdrawn: set[int], expected: set[int]
) -> None:
    assert heads([1, 2, 3], after, withdrawn) == expected


def test_a_record_named_but_not_of_the_group_is_never_a_head() -> None:
    assert heads([2], {2: {1}}, set()) == {2}
