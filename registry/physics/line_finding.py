"""Where in a map are transition lines, and how many families of parallel ones are there?

A transition line is a step of a charge sensor (or a ridge of a current) along a straight
line.  The map, averaged to at most ``DETECTION_SIZE`` pixels a side, is filtered by
elongated Gaussians in all directions that lines of a plunger pair can have: where both
gates pull a dot the same way (electrons and holes alike), a line falls, dy/dx < 0, and
its normal points between the two axes.  For the direction of each normal n and tangent t

    H(k) = (i k.n)^d exp(-[(s_n k.n)^2 + (s_t k.t)^2] / 2),     d = 1 steps, 0 ridges

in the Fourier domain (the derivative of a Gaussian as edge filter: J. Canny, IEEE Trans.
Pattern Anal. Mach. Intell. 8 (1986) 679).  The noise of each response is taken from its
pixels of the wrong sign, which no line reaches: all lines of a map step the same way.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.fft import irfft2, next_fast_len, rfft2
from scipy.ndimage import gaussian_filter1d, maximum_filter1d

from registry.physics.result import Refusal
from registry.samples import FloatArray

__all__ = ["DETECTION_SIZE", "Lines", "Responses", "find_families", "respond", "shrink"]

IndexArray = NDArray[np.intp]
Flags = NDArray[np.bool_]

#: Longest side of the map that lines are looked for in, pixels.
DETECTION_SIZE = 176
#: Width across and along a line of the filter, standard deviations in pixels.
ACROSS, ALONG = 1.3, 5.0
#: What varies more slowly than this (pixels) is background.
BACKGROUND = 14.0
#: Directions of the normal, degrees from the fast axis.  Those from 0 to 90, and a little
#: beyond, are of lines between dot and lead; the others, of either sign, of lines between dots.
DIRECTIONS = np.arange(-84.0, 94.0, 3.0)
LEAD = (DIRECTIONS >= -5.0) & (DIRECTIONS <= 91.0)
#: A pixel is on a line if its response is this many times the noise of the response ...
SIGNIFICANT = 5.5
#: ... and at least this share of the strong ones (no noise: side lobes, rounding).
LEAST_SHARE = 0.15
#: Families are at least so many degrees apart, ...
APART = 9.0
#: ... and a family holds at least this share of the largest one's line pixels.
FAMILY_SHARE = 0.12
#: Share of lines that step the wrong way above which it is a wave, not a set of lines.
WRONG_SIGN = 0.35
#: Pixels along the border where the filter sees beyond the map.
BORDER = 2


@dataclass(frozen=True, eq=False)
class Responses:
    """Filter responses of a map in units of their noise.

    Attributes:
        strength: shape (directions, ny, nx), positive on lines; absolute for ``~LEAD``.
        sign: +1 where the signal rises over a line with rising volts (or ridges), else -1.
        noise: the unit of ``strength``, in the signal's unit a pixel.
    """

    strength: FloatArray
    sign: float
    noise: float


@dataclass(frozen=True, eq=False)
class Lines:
    """Line pixels of one family.

    Attributes:
        normal: direction of the normal, degrees from the fast axis.
        by_row: whether a line crosses rows (one place a row) or columns.
        ridge: pixels on a line's centre, shape (ny, nx).
    """

    normal: float
    by_row: bool
    ridge: Flags


def shrink(z: FloatArray, most: int = DETECTION_SIZE) -> tuple[FloatArray, tuple[int, int]]:
    """Return the map averaged in blocks to at most ``most`` pixels a side, and the block (y, x)."""
    by, bx = (-(-n // most) for n in z.shape)
    ny, nx = z.shape[0] // by, z.shape[1] // bx
    blocks = z[: ny * by, : nx * bx].reshape(ny, by, nx, bx)
    return blocks.mean(axis=(1, 3)), (by, bx)


def respond(z: FloatArray, ridges: bool) -> Responses:
    """Filter a map in all directions.

    Args:
        z: shape (ny, nx), freed of row jumps.
        ridges: lines are ridges of the signal, not steps.
    """
    raw = _filtered(z, 0 if ridges else 1)
    raw -= np.median(raw, axis=(1, 2), keepdims=True)
    best = np.abs(raw).max(axis=0)
    lead = raw[LEAD]
    sign = 1.0 if np.sum(lead[np.abs(lead) > 0.5 * np.quantile(best, 0.98)]) >= 0.0 else -1.0
    raw *= sign
    scatter = np.empty(raw.shape[0])
    for k, one in enumerate(raw):
        wrong = one[one < 0.0]
        scatter[k] = np.median(-wrong) / 0.6745 if wrong.size else 0.0
    # One noise for all, the largest: else quiet directions would pull lines to themselves.
    tiny = max(1e-9 * float(best.max()), float(np.finfo(float).tiny))
    noise = max(float(scatter[LEAD].max()), tiny)
    raw[~LEAD] = np.abs(raw[~LEAD])
    return Responses(raw / noise, sign, noise)


def find_families(found: Responses) -> list[Lines]:
    """Return the families of lines, the one with the most line pixels first.

    Raises:
        Refusal: no line stands out, or as many step one way as the other.
    """
    best = np.argmax(found.strength, axis=0)
    strength = np.take_along_axis(found.strength, best[None], axis=0)[0]
    level = max(SIGNIFICANT, LEAST_SHARE * float(np.quantile(strength, 0.98)))
    by_row = DIRECTIONS[best] < 45.0
    ridge = _inside(_top(strength, by_row) & (strength > level) & LEAD[best])
    if not np.any(ridge):
        raise Refusal(f"no line stands {SIGNIFICANT:g} times above the noise")
    _refuse_waves(found, level, int(np.count_nonzero(ridge)))
    weight = np.bincount(best[ridge], minlength=DIRECTIONS.size).astype(float)
    smooth = gaussian_filter1d(weight, 1.0, mode="constant")
    tops = _separate_tops(smooth)
    normals = [_centre(weight, top) for top in tops]
    return [_lines_of(found, normals, k, level) for k in range(len(normals))]


def _filtered(z: FloatArray, derivative: int) -> FloatArray:
    """Return the raw responses, shape (directions, ny, nx)."""
    pad = int(3 * ALONG)
    pad_y, pad_x = min(pad, z.shape[0] - 1), min(pad, z.shape[1] - 1)
    padded = np.pad(z, ((pad_y, pad_y), (pad_x, pad_x)), mode="reflect", reflect_type="odd")
    size = tuple(next_fast_len(n, real=True) for n in padded.shape)
    padded = np.pad(padded, ((0, size[0] - padded.shape[0]), (0, size[1] - padded.shape[1])), mode="edge")
    ky = 2.0 * np.pi * np.fft.fftfreq(size[0])[:, None]
    kx = 2.0 * np.pi * np.fft.rfftfreq(size[1])[None, :]
    wave = rfft2(padded) * (1.0 - np.exp(-0.5 * BACKGROUND**2 * (kx**2 + ky**2)))
    out = np.empty((DIRECTIONS.size, *z.shape))
    for k, angle in enumerate(np.radians(DIRECTIONS)):
        across = kx * np.cos(angle) + ky * np.sin(angle)
        along = ky * np.cos(angle) - kx * np.sin(angle)
        kernel = np.exp(-0.5 * ((ACROSS * across) ** 2 + (ALONG * along) ** 2))
        turned = wave * kernel * (1j * across if derivative else 1.0)
        whole = irfft2(turned, size)
        out[k] = whole[pad_y : pad_y + z.shape[0], pad_x : pad_x + z.shape[1]]
    return out


def _top(strength: FloatArray, by_row: Flags) -> Flags:
    """Return the pixels that are largest across the line: along x where ``by_row``, else y."""
    along_x = strength == maximum_filter1d(strength, 5, axis=1, mode="nearest")
    along_y = strength == maximum_filter1d(strength, 5, axis=0, mode="nearest")
    return np.asarray(np.where(by_row, along_x, along_y), dtype=bool)


def _inside(flags: Flags) -> Flags:
    """Return the flags without those at the border."""
    inner = np.zeros_like(flags)
    core = (slice(BORDER, -BORDER), slice(BORDER, -BORDER))
    inner[core] = flags[core]
    return inner


def _refuse_waves(found: Responses, level: float, right: int) -> None:
    """Refuse a map with as many lines of the wrong sign."""
    lead = -found.strength[LEAD]
    best = np.argmax(lead, axis=0)
    strength = np.take_along_axis(lead, best[None], axis=0)[0]
    wrong = _inside(_top(strength, DIRECTIONS[LEAD][best] < 45.0) & (strength > level))
    count = int(np.count_nonzero(wrong))
    if count > WRONG_SIGN * right:
        raise Refusal(
            f"{count} line pixels step the other way than {right} do: waves or ridges, not transition lines"
        )


def _separate_tops(weight: FloatArray) -> list[int]:
    """Return the directions (indices) of the families, largest first."""
    top = weight == maximum_filter1d(weight, 3, mode="constant")
    kept: list[int] = []
    for k in np.argsort(-weight):
        alone = all(abs(DIRECTIONS[k] - DIRECTIONS[other]) > APART for other in kept)
        if top[k] and alone and weight[k] > FAMILY_SHARE * weight.max():
            kept.append(int(k))
    return kept


def _centre(weight: FloatArray, top: int) -> float:
    """Return the weighted mean direction about a top, degrees."""
    near = np.abs(DIRECTIONS - DIRECTIONS[top]) <= APART / 2.0
    return float(np.sum((weight * DIRECTIONS)[near]) / np.sum(weight[near]))


def _lines_of(found: Responses, normals: list[float], k: int, level: float) -> Lines:
    """Return the line pixels nearest in direction to family ``k``, a little beyond its ends."""
    apart = np.abs(DIRECTIONS[:, None] - np.array(normals)[None, :])
    mine = (np.argmin(apart, axis=1) == k) & (apart[:, k] <= APART) & LEAD
    mine[np.argmin(np.where(LEAD, apart[:, k], np.inf))] = True
    strength = np.max(found.strength[mine], axis=0)
    others = np.max(found.strength[~mine], axis=0) if np.any(~mine) else np.zeros_like(strength)
    by_row = normals[k] < 45.0
    top = _top(strength, np.full(strength.shape, by_row))
    return Lines(normals[k], by_row, _inside(top & (strength > level) & (strength >= 0.98 * others)))
