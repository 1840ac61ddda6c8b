"""What an input does between its samples, followed exactly.

With the companion matrix of a denominator A, the state x of the first chain holds s^k/A u (k = 0 … n-1), and
a second chain z, driven by x[0], holds s^k/A² u: all that a transfer function with the denominator A, and its
derivative by the coefficients of A, is made of.

Source: block exponentials of Van Loan, IEEE Transactions on Automatic Control 23 (1978) 395 (from memory).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import expm

Array = NDArray[np.float64]
BLOCK = 16  # samples in one matrix product


def companion(denominator: Array) -> Array:
    """(n, n) companion matrix of monic ascending coefficients (n + 1,)."""
    n = denominator.size - 1
    out = np.eye(n, k=1)
    out[-1] = -denominator[:-1]
    return out


def chains(denominator: Array) -> tuple[Array, Array]:
    """(2n, 2n) and (2n,): the two chains x' = F x + e u, z' = F z + e x[0] in one system."""
    n = denominator.size - 1
    a = np.zeros((2 * n, 2 * n))
    a[:n, :n] = a[n:, n:] = companion(denominator)
    a[2 * n - 1, 0] = 1.0
    b = np.zeros(2 * n)
    b[n - 1] = 1.0
    return a, b


def held(a: Array, b: Array, duration: float) -> tuple[Array, Array]:
    """Φ and Γ of x(t + duration) = Φ x(t) + Γ u for a constant u."""
    n = b.size
    block = np.zeros((n + 1, n + 1))
    block[:n, :n] = a * duration
    block[:n, n] = b * duration
    e = expm(block)
    return e[:n, :n], e[:n, n]


def ramped(a: Array, b: Array, duration: float) -> tuple[Array, Array, Array]:
    """Φ, Γ0, Γ1 of x(t + duration) = Φ x(t) + Γ0 u(t) + Γ1 u(t + duration) for a straight line."""
    n = b.size
    block = np.zeros((n + 2, n + 2))
    block[:n, :n] = a * duration
    block[:n, n] = b * duration
    block[n, n + 1] = 1.0
    e = expm(block)
    return e[:n, :n], e[:n, n] - e[:n, n + 1], e[:n, n + 1]


def recursion(phi: Array, drive: Array, initial: Array) -> Array:
    """x[k+1] = Φ x[k] + drive[:, k], all k at once by blocks of matrix products.

    A block of BLOCK samples is one product; the states that enter the blocks obey the same recursion
    with Φ^BLOCK, and so on upwards.

    Parameters
    ----------
    phi : (n, n), drive : (n, N), initial : (n,)

    Returns
    -------
    (n, N) states x[0] … x[N-1]
    """
    n, count = drive.shape
    if count <= BLOCK:
        out = np.empty((n, count))
        x = np.array(initial, dtype=float)
        for k in range(count):
            out[:, k] = x
            x = phi @ x + drive[:, k]
        return out
    blocks = -(-count // BLOCK)
    padded = np.zeros((n, blocks * BLOCK))
    padded[:, :count] = drive
    powers = np.empty((BLOCK + 1, n, n))
    powers[0] = np.eye(n)
    for k in range(BLOCK):
        powers[k + 1] = phi @ powers[k]
    toeplitz = np.zeros((BLOCK, n, BLOCK, n))
    for k in range(1, BLOCK):
        toeplitz[k, :, :k, :] = powers[:k][::-1].transpose(1, 0, 2)
    cut = padded.reshape(n, blocks, BLOCK).transpose(1, 2, 0).reshape(blocks, BLOCK * n)
    last = cut @ powers[:BLOCK][::-1].transpose(0, 2, 1).reshape(BLOCK * n, n)
    entering = recursion(powers[BLOCK], last.T, initial)
    # rows of the result come out as (state, block, sample), which is already time order
    by_state = toeplitz.transpose(2, 3, 1, 0).reshape(BLOCK * n, n * BLOCK)
    starts = powers[:BLOCK].transpose(2, 1, 0).reshape(n, n * BLOCK)
    states = cut @ by_state + entering.T @ starts
    return states.reshape(blocks, n, BLOCK).transpose(1, 0, 2).reshape(n, blocks * BLOCK)[:, :count]


def exponentials(a: Array, durations: Array) -> Array:
    """(N, n, n) exp(a t) for many t at once: Taylor series to order 14 after scaling, then squaring.

    The scaled norm is at most 1/2, where the series' remainder is below 1e-16.
    """
    durations = np.asarray(durations, dtype=float)
    size = np.linalg.norm(a, 1) * np.abs(durations)
    squarings = np.maximum(np.ceil(np.log2(np.maximum(size, 1e-300))) + 1.0, 0.0).astype(int)
    small = a[None] * (durations / 2.0**squarings)[:, None, None]
    out = np.broadcast_to(np.eye(a.shape[0]), small.shape).copy()
    for k in range(14, 0, -1):
        out = np.eye(a.shape[0]) + small @ out / k
    for k in range(int(squarings.max(initial=0))):
        more = squarings > k
        out[more] = out[more] @ out[more]
    return out


def _powers(step: Array, count: int) -> Array:
    """(count, n, n) step^0 … step^(count - 1), by doubling."""
    out = np.eye(step.shape[0])[None]
    while out.shape[0] < count:
        out = np.concatenate([out, out @ step])
        step = step @ step
    return out[:count]


def flow(a: Array, initial: Array, times: Array) -> Array:
    """(n, c, N) exp(a t) x0 for the columns x0 of `initial` (n, c) at times (N,), uniform or not."""
    count = times.size
    steps = np.diff(times)
    if count > 4 * BLOCK and np.ptp(steps) <= 1e-9 * float(np.mean(steps)):
        # exp(a t[i·L + j]) = exp(a T)^j (exp(a T)^L)^i exp(a t[0]): two short lists of powers and one product
        length = int(np.ceil(np.sqrt(count)))
        interval = float(times[-1] - times[0]) / (count - 1)
        begin, step = exponentials(a, np.array([times[0], interval]))
        fine = _powers(step, length)
        coarse = _powers(fine[-1] @ step, -(-count // length)) @ (begin @ initial)
        out = np.tensordot(fine, coarse, axes=(2, 1))  # (length, n, blocks, c)
        return out.transpose(1, 3, 2, 0).reshape(a.shape[0], initial.shape[1], -1)[:, :, :count]
    return np.asarray((exponentials(a, times) @ initial).transpose(1, 2, 0))


def delayed(samples: Array, count: int) -> Array:
    """(r, N) samples moved later by a whole number of rows; steady at the first value before."""
    count = min(count, samples.shape[1])
    first = np.repeat(samples[:, :1], count, axis=1)
    return np.concatenate([first, samples[:, : samples.shape[1] - count]], axis=1)


def drives(
    a: Array, b: Array, samples: Array, interval: float, between: str, dead_time: float = 0.0
) -> tuple[Array, Array, Array]:
    """What enters the state over each interval, the delayed input at each sample, and Φ.

    A dead time need not be a whole number of intervals: a held input then has its step inside the interval,
    a ramped one its corner, and both are followed exactly.

    Parameters
    ----------
    samples : (r, N)

    Returns
    -------
    drive (r, n, N), now (r, N), phi (n, n)
    """
    ratio = dead_time / interval
    whole = int(np.floor(ratio + 1e-12))
    part = max(ratio - whole, 0.0)
    near, far = delayed(samples, whole), delayed(samples, whole + 1)
    if between == "held":
        phi, all_of_it = held(a, b, interval)
        _, later = held(a, b, (1.0 - part) * interval)
        drive = near[:, None, :] * later[:, None] + far[:, None, :] * (all_of_it - later)[:, None]
        return drive, (far if part > 0 else near), phi
    now = (1.0 - part) * near + part * far
    following = np.concatenate([now[:, 1:], 2 * now[:, -1:] - now[:, -2:-1]], axis=1)
    if part == 0.0:
        phi, from_now, to_next = ramped(a, b, interval)
        return now[:, None, :] * from_now[:, None] + following[:, None, :] * to_next[:, None], now, phi
    first, a0, a1 = ramped(a, b, part * interval)
    second, b0, b1 = ramped(a, b, (1.0 - part) * interval)
    drive = (
        now[:, None, :] * (second @ a0)[:, None]
        + near[:, None, :] * (second @ a1 + b0)[:, None]
        + following[:, None, :] * b1[:, None]
    )
    return drive, now, second @ first
