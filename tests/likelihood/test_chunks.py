"""Gram matrices of chunks against NumPy, and bands against sines of known frequency."""

from __future__ import annotations

import jax.numpy as jnp
import numpy as np
import pytest

from bayesglm.likelihood.chunks import N_FFT, band_slices, chunk_sums, pad_to, padded, white_share
from bayesglm.likelihood.digest import BAND_EDGES_HZ


def test_sums_are_plain_products_and_bands_add_up_to_them() -> None:
    z = np.random.default_rng(0).normal(size=(N_FFT, 4))
    gram, bands = chunk_sums(jnp.asarray(z), band_slices(0.5))
    np.testing.assert_allclose(gram, z.T @ z, rtol=1e-12)
    np.testing.assert_allclose(np.asarray(bands).sum(axis=0), z.T @ z, rtol=1e-9, atol=1e-7)


@pytest.mark.parametrize("frequency_Hz", [0.3, 3.0, 40.0, 700.0])
def test_a_sine_lies_in_its_band(frequency_Hz: float) -> None:
    cycles = round(frequency_Hz * N_FFT * 0.5e-3)
    wave = np.sin(2 * np.pi * cycles * np.arange(N_FFT) / N_FFT)[:, None]
    power = np.asarray(chunk_sums(jnp.asarray(wave), band_slices(0.5))[1])[:, 0, 0]
    place = int(np.searchsorted(BAND_EDGES_HZ, frequency_Hz))
    assert power[place] == pytest.approx(N_FFT / 2, rel=1e-9)


def test_white_noise_spreads_over_bands_as_their_widths() -> None:
    share = white_share(0.5)
    assert share.sum() == pytest.approx(1.0)
    noise = np.random.default_rng(1).normal(size=(N_FFT, 1))
    power = np.asarray(chunk_sums(jnp.asarray(noise), band_slices(0.5))[1])[:, 0, 0] / N_FFT
    # Half of it lies above 500 Hz, where a band holds thousands of frequencies.
    np.testing.assert_allclose(power[-3:], share[-3:], rtol=0.15)


def test_padding_adds_zeros_at_the_end_only() -> None:
    part = np.arange(6.0).reshape(3, 2)
    for whole in (padded(part, 5), np.asarray(pad_to(jnp.asarray(part), 5))):
        np.testing.assert_array_equal(whole[:3], part)
        np.testing.assert_array_equal(whole[3:], 0.0)
    assert padded(part, 3) is part
