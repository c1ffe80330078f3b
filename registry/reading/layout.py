"""What does a layout file say about files that do not describe themselves?

A layout is TOML.  Its keys, all of them::

    format = "text"            # or "hdf5", "numpy"
    delimiter = "tab"          # text: "tab", "space" (any white space) or one character
    skip_rows = 0              # text: lines to drop before anything is looked at
    decimal = "."              # text: "." or ","
    kind = "pinch-off"         # a method's name or a free word

    [[axis]]                   # slowest first
    name = "P1"
    unit = "mV"                # needed unless the file gives one
    factor = 1.0               # value in `unit` = value in the file x factor + offset
    offset = 0.0               # in `unit`
    level = "gate"             # or "source"; only for voltages
    column = 1                 # counted from 1: text, or a two-dimensional NumPy array
    dataset = "entry/P1"       # HDF5 path, or a NumPy array's name

    [[signal]]                 # the same keys without level

    [volts]                    # gate = PATH; see registry.reading.moment for PATH
    [settings]                 # name = PATH
    [time]                     # at = PATH, zone = "+01:00", unit = "s"
    [derive]                   # method = "...", given = {name = value}

In ``[volts]`` and ``[settings]`` the keys ``all`` (a PATH to an object or group that holds
every gate), ``unit`` and (volts only) ``level`` are kept for that use when their value is
a text; ``P1 = {path = "...", unit = "mV", factor = 1.0}`` says more about one entry, and a
gate that is really called ``unit`` is written so.  Axes and signals may be left out: then
the file's own description is used and the layout only adds the rest.
"""

from __future__ import annotations

import tomllib
from pathlib import Path
from typing import Final

from registry.errors import InputError
from registry.reading.faults import as_input_error
from registry.reading.layout_check import checked_layout
from registry.reading.layout_parts import Entry, FieldLayout, Format, Layout, MomentLayout

__all__ = ["Entry", "FieldLayout", "Format", "Layout", "MomentLayout", "load_layout", "parse_layout"]

MAX_LAYOUT_BYTES: Final = 2**20
"""Bytes of a layout file: a thousand gates take about 60 kB."""


def load_layout(path: Path) -> Layout:
    """Read the layout file at ``path``.

    Raises:
        InputError: it is not there, is no TOML, or says something that is not known.
    """
    where = str(path)
    with as_input_error(where):
        if path.stat().st_size > MAX_LAYOUT_BYTES:
            raise InputError(
                "the layout is larger than 1 MiB", where=where, remedy="check that this is the layout file"
            )
        content = path.read_bytes()
    return parse_layout(content, where)


def parse_layout(content: bytes, where: str) -> Layout:
    """Return the layout that the TOML text ``content`` describes; ``where`` names it in errors.

    Raises:
        InputError: the content is no TOML, or a key or value is not known.
    """
    try:
        document = tomllib.loads(content.decode("utf-8-sig"))
    except (tomllib.TOMLDecodeError, UnicodeDecodeError, RecursionError) as error:
        raise InputError(
            f"this is no TOML text: {error}", where=where, remedy="correct the line that is named"
        ) from error
    return checked_layout(document, where)
