from __future__ import annotations

import mpmath as mp
import numpy as np
import pytest
from builders import Layer, media_of

from stackopt.physics.line import (
    Chain,
    cascade,
    identity,
    layer,
    medium_chain,
    scaled_sinh_over_u,
    transmission,
    weighted_sum,
)

HZ = np.array([1e3, 1e6])
K = np.array([[1.0, 40.0, 900.0]], dtype=complex) * np.ones((2, 1))
STEEL: Layer = (200.0 - 90.0j, 7e6, 1.0, 100e-6)
COPPER: Layer = (1.0, 5.8e7, 1.0, 35e-6)
FILM: Layer = (1.0, 0.0, 3.0, 25e-6)


def chain_of(*layers: Layer) -> Chain:
    return cascade((medium_chain(medium, d, K, HZ, "TE") for medium, d in media_of(layers, HZ)), K.shape)


def entries(chain: Chain) -> np.ndarray:
    """The four entries with their scale."""
    return np.array([chain.a, chain.b, chain.c, chain.d]) * np.exp(chain.log_scale)


def test_nothing_is_the_identity() -> None:
    np.testing.assert_array_equal(entries(cascade([], (2, 3))), entries(identity((2, 3))))
    value, log_scale = transmission(identity((2, 3)), 1.0 / K)
    np.testing.assert_array_equal(value * np.exp(-log_scale), np.ones((2, 3)))


def test_identity_changes_no_chain() -> None:
    one = chain_of(STEEL)
    for chains in ([identity(K.shape), one], [one, identity(K.shape)]):
        np.testing.assert_allclose(entries(cascade(chains, K.shape)), entries(one), rtol=1e-14)


def test_chains_multiply_from_the_source_side() -> None:
    one, other = entries(chain_of(STEEL)), entries(chain_of(COPPER))
    product = np.einsum("ijfl,jkfl->ikfl", one.reshape(2, 2, 2, 3), other.reshape(2, 2, 2, 3))
    np.testing.assert_allclose(entries(chain_of(STEEL, COPPER)).reshape(2, 2, 2, 3), product, rtol=1e-12)
    assert not np.allclose(entries(chain_of(COPPER, STEEL)), entries(chain_of(STEEL, COPPER)))


def test_chains_can_be_grouped() -> None:
    grouped = cascade([chain_of(STEEL, FILM), chain_of(COPPER)], K.shape)
    np.testing.assert_allclose(entries(grouped), entries(chain_of(STEEL, FILM, COPPER)), rtol=1e-12)


def test_determinants_are_one() -> None:
    a, b, c, d = entries(chain_of(FILM, COPPER, FILM))
    np.testing.assert_allclose(a * d - b * c, 1.0, rtol=1e-9)


def test_turning_a_stack_round_swaps_a_and_d() -> None:
    a, b, c, d = entries(chain_of(STEEL, FILM, COPPER))
    np.testing.assert_allclose(entries(chain_of(COPPER, FILM, STEEL)), [d, b, c, a], rtol=1e-10)


@pytest.mark.parametrize("x", [0.0, 1e-12, 1e-3, 0.0999, 0.1001, 1.0, 30.0, 0.0999j, 0.1001j, 2.0 + 5.0j, 0.07 + 0.07j])
def test_sinh_over_u_is_smooth_where_its_series_ends(x: complex) -> None:
    d = 2e-3
    u = np.array([x / d], dtype=complex)
    with mp.workdps(30):
        exact = mp.mpf(d) if x == 0 else mp.sinh(mp.mpmathify(u[0]) * mp.mpf(d)) / mp.mpmathify(u[0])
        expected = complex(exact * mp.exp(-mp.re(mp.mpmathify(u[0]) * mp.mpf(d))))
    assert scaled_sinh_over_u(u, d)[0] == pytest.approx(expected, rel=2e-14)


def test_a_layer_in_which_nothing_propagates() -> None:
    """u = 0: a magnetic field along the layers at 0 Hz."""
    zero, one = np.zeros((1, 1), complex), np.ones((1, 1), complex)
    chain = layer(zero, 300.0 * one, zero, 1e-3)
    assert entries(chain)[:, 0, 0].tolist() == pytest.approx([1.0, 0.3, 0.0, 1.0])


def test_scale_keeps_thick_stacks_within_the_range_of_numbers() -> None:
    """20,000 nepers in five hundred layers."""
    u = np.full((1, 1), 4e4 + 4e4j)
    chain = cascade([layer(u, np.ones_like(u), u**2, 1e-3)] * 500, (1, 1))
    assert np.isfinite(entries(Chain(chain.a, chain.b, chain.c, chain.d, np.zeros((1, 1))))).all()
    value, log_scale = transmission(chain, 1.0 / u)
    assert log_scale[0, 0] - np.log(np.abs(value[0, 0])) == pytest.approx(20_000.0, rel=1e-12)


def test_transmission_between_terminals() -> None:
    """A series impedance alone is a voltage divider."""
    one, zero = np.ones((1, 1), complex), np.zeros((1, 1), complex)
    value, log_scale = transmission(Chain(one, 4.0 * one, zero, one, np.log(np.full((1, 1), 2.0))), 0.5 * one)
    assert (value * np.exp(-log_scale))[0, 0] == pytest.approx(2.0 / (1.0 + 8.0 + 1.0) / 2.0)


def test_sums_of_lines_of_very_different_scales() -> None:
    log_scale = np.array([[5000.0, 5001.0, 9000.0]])
    total, scale = weighted_sum(np.array([[1.0, 2.0, 1e300]]), np.ones((1, 3), complex), log_scale)
    assert scale[0] == 5000.0
    assert total[0] == pytest.approx(1.0 + 2.0 * np.exp(-1.0))
