"""Which layout tells the reader what the demo laboratory's files leave open.

One layout for each device, kind and subject.  The HDF5 files describe their own axes, the
layout adds where gate volts and settings stand; the text files need their columns named,
because only a layout can say that swept volts are those at the source.
"""

from __future__ import annotations

from seed_demo.sessions import PlannedFile

__all__ = ["LEVER_ARM_U", "layout_name", "layout_text", "signal_name"]

# Relative standard uncertainty of the lever arms that the laboratory once took from diamonds.
LEVER_ARM_U = 0.04

_DERIVED = ("pinch-off", "coulomb-peaks", "dot-transition")
_SETTINGS = (("bias", "V"), ("temperature", "K"), ("magnetic_field", "T"))


def layout_name(planned: PlannedFile) -> str:
    """File name of the layout for a planned file."""
    return f"{planned.device.name}-{planned.kind}-{planned.subject}.toml"


def layout_text(planned: PlannedFile) -> str:
    """TOML text of the layout for a planned file and all others of its name."""
    lines = _nexus() if planned.form == "nexus" else _slip(planned)
    lines.insert(1, f'kind = "{planned.kind}"')
    if planned.kind in _DERIVED:
        lines += ["", "[derive]", f'method = "{planned.kind}"']
        given = _given(planned)
        if given:
            lines.append(f"given = {{ {', '.join(given)} }}")
    return "\n".join(lines) + "\n"


def _given(planned: PlannedFile) -> list[str]:
    """What the laboratory knows beforehand: lever arms, and which line shape a site has."""
    if planned.kind == "pinch-off":
        return []
    arm = planned.device.lever_arm(planned.subject)
    given = [f'lever_arm = "{arm:.4g}±{LEVER_ARM_U * arm:.2g}"']
    if planned.kind == "coulomb-peaks":
        # the two shapes differ by less than the noise: a trace alone cannot always tell them apart
        given.append(f'model = "{planned.device.site(planned.subject).line_shape}"')
    return given


def _nexus() -> list[str]:
    lines = ['format = "hdf5"', "", "[volts]", 'all = "entry/gates@"', 'unit = "V"', 'level = "gate"']
    lines += ["", "[settings]"]
    lines += [f'{name} = {{ path = "entry/settings@{name}", unit = "{unit}" }}' for name, unit in _SETTINGS]
    return [*lines, "", "[time]", 'at = "entry/start_time"']


def _slip(planned: PlannedFile) -> list[str]:
    decimal = "," if planned.form == "slip-comma" else "."
    lines = ['format = "text"', 'delimiter = "tab"', f'decimal = "{decimal}"']
    lines += ["", "[[axis]]", f'name = "{planned.gate}"', 'unit = "V"', 'level = "source"', "column = 1"]
    lines += ["", "[[signal]]", f'name = "{signal_name(planned)}"', 'unit = "nA"', "column = 2"]
    lines += ["", "[volts]", 'all = "$.panel"', 'unit = "V"', 'level = "source"', "", "[settings]"]
    lines += [f'{name} = {{ path = "$.settings.{name}", unit = "{unit}" }}' for name, unit in _SETTINGS]
    return [*lines, "", "[time]", 'at = "$.time"']


def signal_name(planned: PlannedFile) -> str:
    """Name of the signal that the instruments give to a trace of this kind."""
    if planned.kind == "pinch-off":
        return "channel_current"
    if planned.kind == "leakage":
        return "gate_current"
    return f"current_{planned.sensor or planned.subject}"
