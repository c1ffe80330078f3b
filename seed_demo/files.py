"""How a simulated trace becomes a file, byte for byte the same each time.

Two kinds of file, as two racks of instruments would write them: HDF5 with a NeXus NXdata
group, volts at the gate; and text lines of the laboratory's own making ("slip"), volts at
the source's panel, with decimal point or decimal comma.  ``layouts.py`` says how to read them.
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import Final

import h5py
import numpy as np

from seed_demo.instruments import Trace
from seed_demo.wiring import Line

__all__ = ["Moment", "write_nexus", "write_slip"]

# Low bound "earliest" writes object headers without times; the upper bound keeps files readable.
_HDF5_VERSIONS: Final = ("earliest", "v110")

# Text columns carry the signal in nA with this many decimals: one step of the current meter.
_NANOAMPERE_DECIMALS: Final = 5


@dataclass(frozen=True, eq=False)
class Moment:
    """All that surrounds a trace when it is taken.

    Attributes:
        device: CHIP/NAME.
        cooldown: label.
        at: start, UTC.
        volts: V at the gate of all gates.
        settings: name -> (value, SI unit).
        lines: gate name -> the line that drives it.
    """

    device: str
    cooldown: str
    at: datetime
    volts: Mapping[str, float]
    settings: Mapping[str, tuple[float, str]]
    lines: Mapping[str, Line]


def write_nexus(path: Path, trace: Trace, moment: Moment) -> None:
    """Write NXroot/NXentry/NXdata; gate volts and settings are attributes of two groups beside it.

    Texts have a fixed length, objects no times: the same trace gives the same bytes.
    """
    with h5py.File(path, "w", libver=_HDF5_VERSIONS) as file:
        file.attrs["NX_class"] = _text("NXroot")
        file.attrs["default"] = _text("entry")
        entry = _group(file, "entry", "NXentry")
        entry.attrs["default"] = _text("trace")
        _dataset(entry, "title", _text(f"{trace.kind} of {trace.subject}"))
        _dataset(entry, "start_time", _text(_rfc3339(moment.at)))
        _dataset(entry, "sample", _text(moment.device))
        data = _group(entry, "trace", "NXdata")
        data.attrs["signal"] = _text(trace.signal)
        data.attrs["axes"] = np.asarray([trace.gate], dtype="S")
        data.attrs[f"{trace.gate}_indices"] = np.int64(0)
        _dataset(data, trace.gate, trace.volts).attrs["units"] = _text("V")
        _dataset(data, trace.signal, trace.values).attrs["units"] = _text(trace.unit)
        gates = entry.create_group("gates")
        for gate, volts in moment.volts.items():
            gates.attrs[gate] = np.float64(volts)
        settings = entry.create_group("settings")
        for name, (value, _) in moment.settings.items():
            settings.attrs[name] = np.float64(value)


def write_slip(path: Path, trace: Trace, moment: Moment, *, decimal_comma: bool = False) -> None:
    """Write comment lines with JSON, a header, and tab-separated columns.

    Volts, swept and at rest, are those on the panel of the sources.  JSON keeps its decimal point.
    """
    about = {
        "device": moment.device,
        "cooldown": moment.cooldown,
        "time": _rfc3339(moment.at),
        "panel": {gate: _panel(moment.lines[gate], volts) for gate, volts in moment.volts.items()},
        "settings": {name: value for name, (value, _) in moment.settings.items()},
    }
    text = [
        f"# slip 3: {trace.kind} of {trace.subject}",
        "# " + json.dumps(about, separators=(",", ":")),
        f"{trace.gate} [V]\t{trace.signal} [nA]",
    ]
    swept = moment.lines[trace.gate].at_source(trace.volts)
    for volts, current in zip(swept.tolist(), (1e9 * trace.values).tolist(), strict=True):
        row = f"{volts:.7f}\t{current:.{_NANOAMPERE_DECIMALS}f}"
        text.append(row.replace(".", ",") if decimal_comma else row)
    path.write_text("\n".join(text) + "\n", encoding="utf-8", newline="\n")


def _panel(line: Line, volts: float) -> float:
    """Volts as the panel shows them: to a tenth of a microvolt."""
    return round(float(line.at_source(volts)), 7)


def _rfc3339(at: datetime) -> str:
    return f"{at:%Y-%m-%dT%H:%M:%S}.{at.microsecond:06d}Z"


def _text(value: str) -> np.bytes_:
    return np.bytes_(value.encode())


def _group(parent: h5py.Group, name: str, nexus_class: str) -> h5py.Group:
    group = parent.create_group(name)
    group.attrs["NX_class"] = _text(nexus_class)
    return group


def _dataset(parent: h5py.Group, name: str, data: object) -> h5py.Dataset:
    return parent.create_dataset(name, data=data, track_times=False)
