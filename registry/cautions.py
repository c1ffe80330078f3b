"""What a person must have in mind before acting on advice computed from records."""

from __future__ import annotations

__all__ = ["CAUTIONS"]

CAUTIONS: tuple[str, ...] = (
    "Gate oxides die by electrostatic discharge and by over-voltage: ground yourself, and keep "
    "gates tied while cooling or rewiring.",
    "Check the limits against the device's own data, and the source's panel with a meter.",
    "Cryogens displace oxygen and build up pressure, magnets store energy, and warm-ups vent gas: "
    "follow the site's safety rules and its trained staff.",
    "A plan is advice computed from records; the person at the cryostat decides.",
)
"""One caution a member, in the order in which they are shown."""
