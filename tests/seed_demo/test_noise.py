from __future__ import annotations

import numpy as np
import pytest

from seed_demo.noise import Noise, coloured_samples, noise_series


def test_the_same_seed_draws_the_same_noise() -> None:
    one, other = (Noise(1.0, 0.5).draw(64, np.random.default_rng(3)) for _ in range(2))
    assert np.array_equal(one, other)


@pytest.mark.parametrize("exponent", [0.7, 1.0, 1.4])
def test_coloured_samples_have_the_promised_mean_square(exponent: float) -> None:
    rng = np.random.default_rng(11)
    squares = [np.var(coloured_samples(200, 2.0, exponent, rng)) for _ in range(2000)]
    error = np.std(squares) / np.sqrt(len(squares))
    # 3.9 standard errors: one false alarm in 10,000
    assert abs(np.mean(squares) - 4.0) < 3.9 * error


def test_series_have_the_promised_density() -> None:
    """Mean periodogram against S = A^2/f + 2 s^2 dt, away from the lowest frequencies."""
    rng, count, spacing = np.random.default_rng(12), 512, 0.01
    draws = [noise_series(count, spacing, 0.3, 1.0, 0.5, rng) for _ in range(400)]
    window = np.hanning(count)
    spectra = np.abs(np.fft.rfft(np.asarray(draws) * window, axis=1)) ** 2
    density = 2 * spacing * spectra.mean(axis=0) / np.sum(window**2)
    frequencies = np.fft.rfftfreq(count, spacing)
    band = slice(8, 250)
    expected = 0.3**2 / frequencies[band] + 2 * 0.5**2 * spacing
    # each ordinate scatters by 1/sqrt(400); neighbours share a Hann window, so a third are independent
    ratio = float(np.mean(density[band] / expected))
    assert abs(ratio - 1.0) < 3.9 / np.sqrt(400 * 242 / 3) + 0.01


def test_noise_without_a_pink_part_is_white() -> None:
    samples = Noise(2.0).draw(20_000, np.random.default_rng(13))
    neighbours = np.corrcoef(samples[1:], samples[:-1])[0, 1]
    assert abs(neighbours) < 3.9 / np.sqrt(samples.size)
