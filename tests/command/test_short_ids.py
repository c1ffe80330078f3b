from __future__ import annotations

from sqlalchemy import text

from registry.command.short_ids import SLOTS, short_ids, shortest
from registry.keeping.describing import add_chip
from registry.keeping.handle import Registry
from registry.keeping.naming import short


def test_many_ids_are_shortened_as_each_alone_is(registry_on: Registry) -> None:
    with registry_on.writing():
        for n in range(SLOTS + 20):
            add_chip(registry_on, f"K{n}")
    with registry_on.reading() as connection:
        digests = [bytes(d) for d in connection.execute(text("SELECT digest FROM record")).scalars()]
        assert len(digests) == SLOTS + 20
        alone = {digest.hex(): short(connection, digest) for digest in digests}
        assert short_ids(connection, alone) == alone
        assert short_ids(connection, []) == {}


def test_ids_that_begin_alike_are_shown_as_far_as_they_differ() -> None:
    one, twin, other = "ab" * 5 + "c1" + "0" * 52, "ab" * 5 + "c2" + "0" * 52, "cd" * 32
    everything = (one, twin, other)
    assert shortest(one, everything) == "ab" * 5 + "c1"
    assert shortest(twin, everything) == "ab" * 5 + "c2"
    assert shortest(other, everything) == "cd" * 5
