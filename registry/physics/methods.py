"""How is a method found by name and run?

Importing this module loads no numerical library; the fitting code of a method is
loaded when it first runs.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from importlib import import_module
from typing import TYPE_CHECKING, cast

from registry.errors import InputError
from registry.physics.catalogue import FACTS, GivenFact, MethodFacts, facts
from registry.physics.sources import source_digest

if TYPE_CHECKING:
    from registry.physics.result import Given, Result
    from registry.samples import Samples

__all__ = ["METHODS", "Method", "method"]


@dataclass(frozen=True)
class Method:
    """A versioned fit.

    Attributes:
        facts: all that is known without running it.
    """

    facts: MethodFacts

    @property
    def name(self) -> str:
        """Name of the method, e.g. ``coulomb-peaks``."""
        return self.facts.name

    @property
    def version(self) -> str:
        """Version of the numbers it makes."""
        return self.facts.version

    @property
    def title(self) -> str:
        """One line for people."""
        return self.facts.title

    @property
    def main_quantity(self) -> str:
        """The quantity without which the method has refused."""
        return self.facts.main_quantity

    @property
    def quantities(self) -> Mapping[str, str]:
        """Name -> unit of every quantity it returns."""
        return self.facts.quantities

    @property
    def givens(self) -> tuple[GivenFact, ...]:
        """What may be given to it."""
        return self.facts.givens

    @property
    def source_digest(self) -> str:
        """SHA-256 (hex) of the source that makes its numbers."""
        return source_digest(self.name)

    def run(self, samples: Samples, given: Mapping[str, Given] | None = None) -> Result:
        """Run it on samples.

        Raises:
            InputError: samples of another shape, or something unknown or impossible given.
        """
        from threadpoolctl import threadpool_limits

        module = import_module(f"registry.physics.{self.facts.module}")
        # The matrices are small: more threads cost more than they bring, many times more on
        # a busy machine.
        with threadpool_limits(1, user_api="blas"):
            return cast("Result", module.run(samples, given or {}))


class _Methods(Mapping[str, Method]):
    """All methods by name, read-only."""

    def __getitem__(self, name: str) -> Method:
        return Method(FACTS[name])

    def __iter__(self) -> Iterator[str]:
        return iter(FACTS)

    def __len__(self) -> int:
        return len(FACTS)


#: Every method by name.
METHODS: Mapping[str, Method] = _Methods()


def method(name: str, version: str | None = None) -> Method:
    """Return a method by name, and version if that matters.

    Raises:
        InputError: no such method or version; those there are are named.
    """
    found = Method(facts(name))
    if version is not None and version != found.version:
        raise InputError(
            f"{name} has no version {version!r}",
            where="method",
            remedy=f"use version {found.version}, or the program that version came with",
        )
    return found
