"""How a lineage reads: one record a block, by its distance from the record asked about."""

from __future__ import annotations

from typing import TYPE_CHECKING

from registry.command.printing import plain, wrap
from registry.command.recording import Shorten

if TYPE_CHECKING:
    from registry.questions.lineage import Lineage, Node

__all__ = ["MOST_SHOWN", "lineage_lines"]

MOST_SHOWN = 200
"""Records on the page; the JSON document holds them all."""


def lineage_lines(answer: Lineage, shorten: Shorten) -> tuple[str, ...]:
    """The page of ``lineage``; a file's SHA-256 stands on a line of its own, whole."""
    direction = "what hangs on it" if answer.down else "what it was made from"
    start, *others = answer.nodes
    lines = [*_block(start, shorten), "", f"{direction}:" if others else f"{direction}: nothing"]
    for node in others[:MOST_SHOWN]:
        lines += _block(node, shorten, indent="  ")
    if len(others) > MOST_SHOWN:
        lines.append(f"  and {len(others) - MOST_SHOWN} more (--json lists them)")
    if answer.cut:
        lines.append("  cut short: there are more records than this answer takes")
    return tuple(lines)


def _block(node: Node, shorten: Shorten, indent: str = "") -> list[str]:
    kind = node.kind.replace("_", " ")
    lines = wrap(f"{shorten(node.id)}  {kind}  {_words(node)}".rstrip(), indent)
    if node.kind == "raw_file":
        lines.append(f"{indent}    sha256  {plain(node.details['sha256'])}")
    if node.kind == "analysis":
        lines.append(f"{indent}    code    {plain(node.details['source_digest'])}")
    for field, values in node.amended.items():
        lines += wrap(f"amended: {field} is {' | '.join(map(str, values))}", f"{indent}    ")
    for reason in node.withdrawn:
        lines += wrap(reason, f"{indent}    ! ")
    return lines


def _words(node: Node) -> str:
    if node.kind == "raw_file":
        return f"{node.details['size']} bytes"
    return node.what
