"""The sample clock: uniform, printed, jittering, with rows lost, doubled or out of order."""

from __future__ import annotations

import numpy as np
import pytest

from rigtally.errors import LogError
from rigtally.records.clock import make_record
from rigtally.records.record import Channel, Provenance, Record

GRID = np.arange(4000) * 1e-3


def record_of(
    stamps: np.ndarray | None, rate: float | None = None, samples: np.ndarray | None = None
) -> Record:
    count = 4000 if stamps is None else stamps.size
    values = np.arange(count, dtype=float) if samples is None else samples
    return make_record([Channel("p", values)], stamps, rate, Provenance(file="log.csv", lines=(3, 3 + count)))


def kinds(record: Record) -> set[str]:
    return {fault.kind for fault in record.clock_faults}


def test_a_stated_rate_is_taken_as_it_is() -> None:
    """Without stamps the rate alone makes the clock."""
    record = record_of(None, 250.0)
    assert record.interval == 1 / 250
    assert record.uniform and not record.clock_faults


@pytest.mark.parametrize(
    ("label", "stamps"),
    [
        ("exact", GRID),
        ("printed with three places", np.round(GRID + 12.345, 3)),
        ("seconds since 1970", 1.7e9 + GRID),
        ("32-bit numbers", GRID.astype(np.float32).astype(float)),
    ],
)
def test_an_even_clock_has_the_interval_that_a_person_would_write(label: str, stamps: np.ndarray) -> None:
    """Round-off of the stamps neither makes jitter nor an interval of sixteen digits."""
    record = record_of(stamps)
    assert record.uniform
    assert record.interval == 1e-3, label
    assert record.start == pytest.approx(stamps[0], abs=1e-6)
    assert not record.clock_faults


@pytest.mark.parametrize("rate", [1024.0, 600.0, 333.3])
def test_a_print_too_coarse_for_the_rate_is_still_uniform(rate: float) -> None:
    """Stamps rounded to 1 ms give the mean interval within its u, and no lost or doubled rows."""
    record = record_of(np.round(np.arange(20000) / rate, 3))
    assert record.uniform
    assert record.count == 20000
    assert abs(record.interval * rate - 1) < 5 * max(record.u_interval, 1e-12)
    assert record.u_interval < 2e-5
    assert not kinds(record) & {"lost-rows", "gap", "doubled", "jitter"}


def test_lost_rows_become_empty_rows() -> None:
    """5 % lost rows: the grid stays uniform, what is there stays at its instant, the rest is NaN."""
    rng = np.random.default_rng(1)
    lost = rng.choice(np.arange(1, GRID.size - 1), 200, replace=False)
    stamps = np.delete(GRID, lost)
    record = record_of(stamps, samples=np.delete(np.arange(4000.0), lost))
    assert record.uniform and record.interval == 1e-3 and record.count == 4000
    samples = record.channels[0].samples
    assert np.array_equal(np.flatnonzero(np.isnan(samples)), np.sort(lost))
    known = np.isfinite(samples)
    assert np.array_equal(samples[known], np.flatnonzero(known))
    (fault,) = record.clock_faults
    assert fault.count == 200


def test_lost_rows_under_a_coarse_print_are_found() -> None:
    """600 Hz printed to 1 ms with 5 % of the rows lost: interval and places come out right."""
    rng = np.random.default_rng(2)
    lost = np.sort(rng.choice(np.arange(1, 5999), 300, replace=False))
    stamps = np.round(np.delete(np.arange(6000), lost) / 600.0, 3)
    record = record_of(stamps)
    assert record.uniform
    assert record.interval == pytest.approx(1 / 600, rel=1e-6)
    assert np.array_equal(np.flatnonzero(np.isnan(record.channels[0].samples)), lost)


def test_a_gap_is_named_with_its_length() -> None:
    """Twenty rows missing in a row are a gap of 20 ms, after the row before it."""
    record = record_of(np.delete(GRID, np.arange(500, 520)))
    (fault,) = record.clock_faults
    assert fault.kind == "gap" and fault.count == 20 and fault.rows == (500,)
    assert fault.size == pytest.approx(0.020)
    assert np.isnan(record.channels[0].samples[500:520]).all()


def test_a_pause_of_a_day_is_not_filled() -> None:
    """Two runs in one file keep their true stamps: a day of empty rows would be no record."""
    record = record_of(np.concatenate([GRID, GRID + 86400.0]))
    assert not record.uniform
    assert record.count == 8000
    assert "gap" in kinds(record)


@pytest.mark.parametrize(("share", "uniform"), [(0.001, True), (0.01, True), (0.1, False), (0.3, False)])
def test_jitter_is_measured_and_large_jitter_keeps_the_stamps(share: float, uniform: bool) -> None:
    """Its standard deviation within 5 %; above 2 % of the interval the true stamps are used."""
    rng = np.random.default_rng(3)
    stamps = np.sort(np.arange(20000) * 1e-3 + share * 1e-3 * rng.standard_normal(20000))
    record = record_of(stamps)
    assert record.uniform is uniform
    assert record.jitter == pytest.approx(share * 1e-3, rel=0.05)
    assert record.stamps is None if uniform else np.array_equal(record.time, stamps)
    assert not kinds(record) & {"lost-rows", "gap", "doubled"}


def test_the_interval_of_a_jittering_clock_lies_within_its_u() -> None:
    """95 % of 400 jittering clocks have the true interval within 1.96 u (binomial bounds 92 % to 97.5 %)."""
    rng = np.random.default_rng(4)
    inside = 0
    for _ in range(400):
        stamps = (np.arange(300) + 0.015 * rng.standard_normal(300)) * 7.3e-4
        record = record_of(stamps - stamps[0])
        inside += abs(record.interval / 7.3e-4 - 1) < 1.96 * record.u_interval
    assert 0.92 * 400 <= inside <= 0.975 * 400


def test_a_stated_rate_overrules_jitter() -> None:
    """With --rate and stamps that agree with it the grid is the stated one."""
    rng = np.random.default_rng(5)
    record = record_of(np.sort(GRID + 1e-4 * rng.standard_normal(4000)), 1000.0)
    assert record.uniform and record.interval == 1e-3 and record.u_interval == 0.0


def test_a_wandering_clock_goes_into_u() -> None:
    """A rate that changes by 20 ppm over the record is used as uniform, with as much in u of the interval."""
    slow = np.arange(100000) * 1e-3
    record = record_of(slow + 1e-7 * slow**2)
    assert record.uniform and "wander" in kinds(record)
    assert 3e-6 < record.u_interval < 3e-5


def test_doubled_rows_are_left_out() -> None:
    """Equal doubles stand once; where the two rows contradict each other both are left out."""
    stamps = np.sort(np.append(GRID, [GRID[5], GRID[9]]))
    samples = np.arange(4002.0)
    samples[6] = samples[5]
    record = record_of(stamps, samples=samples)
    values = record.channels[0].samples
    assert record.count == 4000 and record.uniform
    assert values[5] == 5.0
    assert np.isnan(values[9])
    assert "doubled" in kinds(record)


def test_rows_without_a_stamp_are_left_out() -> None:
    """A row without a stamp is not guessed at."""
    stamps = GRID.copy()
    stamps[[7, 8]] = np.nan
    record = record_of(stamps)
    assert record.uniform and record.count == 4000
    assert np.isnan(record.channels[0].samples[[7, 8]]).all()
    assert "stamp-missing" in kinds(record)


def test_rows_at_no_steady_rate_are_called_irregular() -> None:
    """Events logged as they come are no grid with half of its rows lost."""
    rng = np.random.default_rng(6)
    record = record_of(np.cumsum(rng.exponential(size=2000)))
    assert not record.uniform
    assert kinds(record) == {"irregular"}


@pytest.mark.parametrize(
    ("stamps", "rate", "code", "says"),
    [
        (np.array([0.0, 1.0, 2.0, 1.5, 3.0]), None, "clock-backwards", "line 6"),
        (np.zeros(5), None, "clock-stands", "--rate"),
        (GRID, 900.0, "rate-contradicts-stamps", "1000"),
        (np.array([0.0]), None, "too-short", "1 row"),
        (None, None, "no-clock", "--rate"),
        (None, -1.0, "bad-rate", "above 0"),
        (np.full(5, np.nan), None, "no-clock", "--rate"),
    ],
)
def test_clocks_that_cannot_be_used_are_refused(
    stamps: np.ndarray | None, rate: float | None, code: str, says: str
) -> None:
    """Each refusal has its code, and says where or what to do."""
    with pytest.raises(LogError) as caught:
        record_of(stamps, rate)
    assert caught.value.code == code
    assert says in caught.value.line()


def test_channels_of_different_length_are_refused() -> None:
    """The lengths are named."""
    with pytest.raises(LogError, match="p 3, q 4"):
        make_record([Channel("p", np.zeros(3)), Channel("q", np.zeros(4))], None, 1.0, Provenance())


def test_a_million_stamps_take_less_than_a_second() -> None:
    """Printed stamps with lost rows; a bound several times the usual time, for a busy machine."""
    import time

    stamps = np.delete(np.round(np.arange(1_000_000) * 1e-3, 3), np.arange(1000, 900_000, 777))
    begin = time.process_time()
    record = record_of(stamps)
    assert time.process_time() - begin < 2.0
    assert record.count == 1_000_000
