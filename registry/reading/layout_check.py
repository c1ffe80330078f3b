"""Is a TOML document a layout, and which one?

Every key and value is checked, so that a misspelt key is named instead of being ignored.
"""

from __future__ import annotations

import difflib
import math
from collections.abc import Mapping
from typing import Any, Final, Literal, cast, get_args

from registry.errors import InputError
from registry.reading.layout_parts import Entry, FieldLayout, Format, Layout, MomentLayout
from registry.reading.times import zone_offset
from registry.records.units import canonical
from registry.samples import Level

__all__ = ["checked_layout"]

_TOP: Final = (
    *("format", "delimiter", "skip_rows", "decimal", "kind", "axis", "signal"),
    *("volts", "settings", "time", "derive"),
)
_FIELD: Final = ("name", "unit", "factor", "offset", "column", "dataset")


def checked_layout(document: Mapping[str, Any], where: str) -> Layout:
    """Return the layout that ``document`` describes; ``where`` names it in errors.

    Raises:
        InputError: a key or value is not known, or two contradict each other.
    """
    return _Checker(where).layout(document)


def _fault(what: str, where: str, remedy: str) -> InputError:
    return InputError(what, where=where, remedy=remedy)


class _Checker:
    """Turns the TOML document of one layout into a ``Layout``, or says what is wrong."""

    def __init__(self, where: str) -> None:
        self.where = where

    def layout(self, document: Mapping[str, Any]) -> Layout:
        self.known(document, _TOP, "the layout")
        chosen = self.word(document, "format", get_args(Format), "the layout")
        if chosen is None:
            raise _fault("the layout has no format", self.where, 'add e.g. format = "text"')
        time = self.table(document, "time")
        if time is not None:
            self.known(time, ("at", "zone", "unit"), "[time]")
        layout = Layout(
            format=cast(Format, chosen),
            delimiter=self.delimiter(document),
            skip_rows=self.whole(document, "skip_rows", 0, "the layout") or 0,
            decimal=self.word(document, "decimal", (".", ","), "the layout"),
            axes=self.fields(document, "axis"),
            signals=self.fields(document, "signal"),
            volts=self.moment(document, "volts"),
            settings=self.moment(document, "settings"),
            time=None
            if time is None
            else self.entry(dict(time, path=time.get("at")), "[time] at", ("at", "zone")),
            zone=None if time is None else self.text(time, "zone", "[time]"),
            kind=self.text(document, "kind", "the layout"),
            derive=self.derive(document),
        )
        self.consistent(layout)
        return layout

    def consistent(self, layout: Layout) -> None:
        """Refuse what is well formed but cannot be meant."""
        if bool(layout.axes) and not layout.signals:
            raise _fault("the layout has axes but no signal", self.where, "add a [[signal]] table")
        if layout.zone is not None:
            zone_offset(layout.zone, where=f"{self.where}, [time] zone")
        if layout.format != "text" and (layout.delimiter or layout.decimal or layout.skip_rows):
            raise _fault(
                f"delimiter, decimal and skip_rows have no meaning for format {layout.format!r}",
                self.where,
                "remove them, or write format = 'text'",
            )
        if layout.decimal == "," and layout.delimiter == ",":
            raise _fault(
                "delimiter and decimal are both ','", self.where, "give the delimiter that the file has"
            )
        names = [item.name for item in (*layout.axes, *layout.signals)]
        for name in names:
            if names.count(name) > 1:
                raise _fault(
                    f"the name {name!r} stands twice", self.where, "give every axis and signal its own"
                )
        for item in (*layout.axes, *layout.signals):
            self.placed(layout.format, item)

    def placed(self, chosen: Format, item: FieldLayout) -> None:
        place = f"{item.name!r}"
        if item.column is not None and item.dataset is not None:
            raise _fault(f"{place} has both column and dataset", self.where, "keep the one that is meant")
        if chosen == "text" and item.column is None:
            raise _fault(f"{place} has no column", self.where, "add column, counted from 1")
        if chosen == "hdf5" and item.dataset is None:
            raise _fault(f"{place} has no dataset", self.where, "add dataset, the HDF5 path")
        if item.level is not None and item.unit is not None and canonical(item.unit)[2] != "V":
            raise _fault(f"{place} has a level but is no voltage", self.where, "remove level")

    def known(self, table: Mapping[str, Any], keys: tuple[str, ...], what: str) -> None:
        for key in table:
            if key not in keys:
                near = difflib.get_close_matches(key, keys, n=1)
                hint = f"did you mean {near[0]!r}?" if near else f"known are {', '.join(keys)}"
                raise _fault(f"{what} has the unknown key {key!r}", self.where, hint)

    def text(self, table: Mapping[str, Any], key: str, what: str) -> str | None:
        value = table.get(key)
        if value is not None and (not isinstance(value, str) or not value.strip()):
            raise _fault(f"{what}: {key} = {value!r} is no text", self.where, f'write {key} = "..."')
        return value

    def word(self, table: Mapping[str, Any], key: str, allowed: tuple[str, ...], what: str) -> str | None:
        value = self.text(table, key, what)
        if value is not None and value not in allowed:
            choices = " or ".join(repr(word) for word in allowed)
            raise _fault(f"{what}: {key} = {value!r} is not known", self.where, f"write {choices}")
        return value

    def number(self, table: Mapping[str, Any], key: str, default: float, what: str) -> float:
        value = table.get(key, default)
        if isinstance(value, bool) or not isinstance(value, int | float) or not math.isfinite(value):
            raise _fault(f"{what}: {key} = {value!r} is no number", self.where, f"write {key} = 1.0")
        return float(value)

    def whole(self, table: Mapping[str, Any], key: str, least: int, what: str) -> int | None:
        value = table.get(key)
        if value is not None and (isinstance(value, bool) or not isinstance(value, int) or value < least):
            raise _fault(
                f"{what}: {key} = {value!r} is no whole number from {least}", self.where, "correct it"
            )
        return value

    def table(self, document: Mapping[str, Any], key: str) -> Mapping[str, Any] | None:
        value = document.get(key)
        if value is not None and not isinstance(value, dict):
            raise _fault(f"{key} is no table", self.where, f"write it as [{key}]")
        return value

    def delimiter(self, document: Mapping[str, Any]) -> str | None:
        value = document.get("delimiter")
        named = {"tab": "\t", "space": " ", "comma": ",", "semicolon": ";"}
        if value is None or (isinstance(value, str) and value in named):
            return None if value is None else named[value]
        if not isinstance(value, str) or len(value) != 1 or value.isalnum() or value in "+-.\"'\n\r":
            raise _fault(
                f"delimiter = {value!r} cannot part numbers",
                self.where,
                'write "tab", "space" or one character',
            )
        return value

    def fields(self, document: Mapping[str, Any], key: Literal["axis", "signal"]) -> tuple[FieldLayout, ...]:
        tables = document.get(key, [])
        if not isinstance(tables, list) or not all(isinstance(table, dict) for table in tables):
            raise _fault(f"{key} is no list of tables", self.where, f"write each as [[{key}]]")
        return tuple(self.field(table, key, number) for number, table in enumerate(tables, start=1))

    def field(self, table: Mapping[str, Any], key: Literal["axis", "signal"], number: int) -> FieldLayout:
        what = f"[[{key}]] {number}"
        self.known(table, (*_FIELD, "level") if key == "axis" else _FIELD, what)
        name = self.text(table, "name", what)
        if name is None:
            raise _fault(f"{what} has no name", self.where, 'add name = "..."')
        unit = self.unit(table, what)
        return FieldLayout(
            name=name,
            unit=unit,
            factor=self.number(table, "factor", 1.0, what),
            offset=self.number(table, "offset", 0.0, what),
            level=cast("Level | None", self.word(table, "level", get_args(Level), what)),
            column=self.whole(table, "column", 1, what),
            dataset=self.text(table, "dataset", what),
        )

    def unit(self, table: Mapping[str, Any], what: str) -> str | None:
        value = table.get("unit")
        if value is None:
            return None
        if not isinstance(value, str):
            raise _fault(f"{what}: unit = {value!r} is no text", self.where, 'write unit = "mV"')
        canonical(value, where=f"{self.where}, {what}")
        return value

    def entry(self, value: Any, what: str, more: tuple[str, ...] = ()) -> Entry:
        if isinstance(value, str):
            value = {"path": value}
        if not isinstance(value, dict):
            raise _fault(f"{what} = {value!r} is no path", self.where, "write the path as a text")
        self.known(value, ("path", "unit", "factor", *more), what)
        path = self.text(value, "path", what)
        if path is None:
            raise _fault(f"{what} has no path", self.where, "say where in the file it stands")
        return Entry(path=path, unit=self.unit(value, what), factor=self.number(value, "factor", 1.0, what))

    def moment(self, document: Mapping[str, Any], key: Literal["volts", "settings"]) -> MomentLayout | None:
        table = self.table(document, key)
        if table is None:
            return None
        kept = ("all", "unit", "level") if key == "volts" else ("all", "unit")
        own = {name: table[name] for name in kept if isinstance(table.get(name), str)}
        entries = {
            name: self.entry(value, f"[{key}] {name}") for name, value in table.items() if name not in own
        }
        if not entries and "all" not in own:
            raise _fault(f"[{key}] names nothing", self.where, 'add all = "PATH" or one line a name')
        return MomentLayout(
            entries=entries,
            all_path=self.text(own, "all", f"[{key}]"),
            unit=self.unit(own, f"[{key}]"),
            level=cast(Level, self.word(own, "level", get_args(Level), f"[{key}]") or "gate"),
        )

    def derive(self, document: Mapping[str, Any]) -> Mapping[str, Any] | None:
        table = self.table(document, "derive")
        if table is None:
            return None
        self.known(table, ("method", "given"), "[derive]")
        method = self.text(table, "method", "[derive]")
        given = table.get("given", {})
        if method is None or not isinstance(given, dict):
            raise _fault(
                "[derive] has no method, or given is no table", self.where, 'write method = "pinch-off"'
            )
        for name, value in given.items():
            if isinstance(value, bool) or not isinstance(value, int | float | str):
                raise _fault(f"[derive] given {name} = {value!r}", self.where, "give a number or a text")
        return {"method": method, "given": dict(given)}
