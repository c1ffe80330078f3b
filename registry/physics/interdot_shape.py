"""Which shape has an interdot charge transition along a detuning sweep?

One electron shared by two levels that are tunnel coupled, in thermal equilibrium:

    p = (e / Omega) tanh(Omega / (2 k_B T)),     Omega = sqrt(e**2 + 4 t**2),

the difference of the two dots' occupations, from -1 to 1 (n = (1 + p)/2 is that of one
dot); e is the detuning, t the tunnel coupling, gap 2 t.  Pure functions; detuning, gap
and thermal energy in one and the same unit, eV or, divided by the lever arm, gate volts.

Source: L. DiCarlo et al., Phys. Rev. Lett. 92 (2004) 226801.
"""

from __future__ import annotations

import numpy as np

from registry.physics.lineshapes import single_level
from registry.samples import FloatArray

__all__ = ["polarisation", "polarisation_slopes"]

#: Omega is held above this share of the thermal energy, where p is a straight line.
LEAST_OMEGA = 1e-9


def polarisation(detuning: FloatArray, gap: float, thermal: float) -> FloatArray:
    """Return p at ``detuning`` (n,); ``gap`` = 2 t >= 0 and ``thermal`` = k_B T > 0."""
    omega = _omega(detuning, gap, thermal)
    p: FloatArray = detuning / omega * np.tanh(0.5 * omega / thermal)
    return p


def polarisation_slopes(
    detuning: FloatArray, gap: float, thermal: float
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return the derivatives of p by detuning, by gap and by the logarithm of ``thermal``."""
    omega = _omega(detuning, gap, thermal)
    per_omega = np.tanh(0.5 * omega / thermal) / omega
    sharp = 0.5 * single_level(omega / thermal) / thermal
    share = (detuning / omega) ** 2
    by_detuning: FloatArray = per_omega * (1.0 - share) + share * sharp
    by_gap: FloatArray = detuning * gap / omega**2 * (sharp - per_omega)
    by_log_thermal: FloatArray = -detuning * sharp
    return by_detuning, by_gap, by_log_thermal


def _omega(detuning: FloatArray, gap: float, thermal: float) -> FloatArray:
    """Return the splitting of the two levels, never quite zero."""
    omega: FloatArray = np.maximum(np.hypot(detuning, gap), LEAST_OMEGA * thermal)
    return omega
