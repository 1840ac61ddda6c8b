"""Fits of single events compared: which parameters move with size or direction."""

from __future__ import annotations

import numpy as np
import pytest

from rigtally.errors import UsageError
from rigtally.estimation.linearity import compare_events
from rigtally.estimation.result import Fit
from rigtally.forms.named import form
from rigtally.quantities.uncertain import Uncertain

SIZES = np.array([1.0, -1.0, 0.5, -0.5, 2.0, -2.0, 1.5, -1.5])
U = np.array([0.01, 0.2, 0.005])


def fits_of(rng: np.random.Generator, with_size: np.ndarray, with_direction: np.ndarray) -> list[Fit]:
    """Parameters 2, 30, 0.4 with u, moved by what is given over the range of sizes and between directions."""
    second = form("second-order")
    out = []
    for size in SIZES:
        share = (abs(size) - 1.25) / 1.5
        theta = np.array([2.0, 30.0, 0.4]) + with_size * share + 0.5 * np.sign(size) * with_direction
        theta = theta + U * rng.standard_normal(3)
        parameters = {
            name: Uncertain(value, u, unit)
            for name, value, u, unit in zip(second.names, theta, U, ("V/Pa", "rad/s", ""), strict=True)
        }
        out.append(
            Fit(
                second,
                "time",
                second.names,
                parameters,
                np.diag(U**2),
                second.transfer_matrix(theta),
                {},
                ("V",),
                ("Pa",),
                1e-3,
                1000,
                "held",
            )
        )
    return out


def test_linear_rigs_are_called_linear() -> None:
    """Of 200 linear rigs at most 1 % plus 3 σ (6) show a movement."""
    rng = np.random.default_rng(70)
    none = np.zeros(3)
    found = sum(not compare_events(fits_of(rng, none, none), SIZES).linear for _ in range(200))
    assert found <= 6


def test_movements_are_found_with_their_amount() -> None:
    """A gain that falls by 0.1 over the sizes and a damping that differs by 0.05 between directions."""
    comparison = compare_events(
        fits_of(np.random.default_rng(71), np.array([-0.1, 0, 0]), np.array([0, 0, 0.05])), SIZES
    )
    moved = {movement.feature: movement for movement in comparison.movements}
    gain, damping = moved["gain"], moved["damping_ratio"]
    assert gain.size_matters and not gain.direction_matters
    assert gain.with_size.value == pytest.approx(-0.1, abs=4 * gain.with_size.u)
    assert damping.direction_matters and not damping.size_matters
    assert damping.with_direction.value == pytest.approx(0.05, abs=4 * damping.with_direction.u)
    assert not moved["natural_frequency"].size_matters
    assert comparison.sizes == (0.5, 2.0)
    assert [warning.code for warning in comparison.warnings] == ["not-linear", "not-linear"]


@pytest.mark.parametrize(("count", "sizes"), [(2, SIZES[:2]), (4, SIZES[:3]), (3, np.array([1.0, 0.0, 2.0]))])
def test_what_cannot_be_compared_is_refused(count: int, sizes: np.ndarray) -> None:
    """Too few fits, other numbers of sizes, an event without a size."""
    fits = fits_of(np.random.default_rng(72), np.zeros(3), np.zeros(3))[:count]
    with pytest.raises(UsageError) as caught:
        compare_events(fits, sizes)
    assert caught.value.code == "bad-comparison"
