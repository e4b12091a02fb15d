"""What the judging promises, by simulation at the level of figures: risks, speed to the alert, coverage, cost.

``python -m tests.bench.bench_judge [PART …]`` prints one table a part; every part is seeded. The tests run the same
functions with fewer bars.
"""

from __future__ import annotations

import math
import platform
import sys
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
import scipy
from numpy.typing import NDArray
from scipy.special import betaincinv, ndtr

from edgewatch.figures.limits import poisson_limits
from edgewatch.figures.tally import Tally
from edgewatch.figures.values import Figures
from edgewatch.judge.bands import Band, ReferenceBar
from edgewatch.judge.drift import DriftWatch
from edgewatch.judge.evidence import RateEvidence, ReachEvidence
from edgewatch.judge.sequential import least_mean_track_m
from edgewatch.judge.teaching import find_outliers, teach
from edgewatch.judge.trial import Trial
from edgewatch.sight.detections import Detections, Light, PictureFlag
from edgewatch.sight.optics import Optics

BARS = 20_000
FALSE_ALARM, MISS = 0.001, 0.01
WINDOW_S = 0.25
TRACK_M_S = 60.0
"""Track a second of contact: about 15 sparks in sight, as of a light stream."""
DARK = Light(
    background_dn=5.0,
    noise_dn=1.0,
    saturated_share=0.0,
    streak_width_px=2.0,
    streak_peak_dn=50.0,
    flags=PictureFlag.NONE,
)
OPTICS = Optics(
    width_px=2400, height_px=800, mm_per_px=1.0, contact_px=(20.0, 400.0), direction_deg=0.0, exposure_ms=2.5, fps=200.0
)
Array = NDArray[np.float64]


def counts(rng: np.random.Generator, mean: Array, dispersion: float, law: str = "negative binomial") -> Array:
    """Burst counts of that mean and dispersion: Poisson, negative binomial, or families of one size."""
    if dispersion == 1.0:
        return rng.poisson(mean).astype(np.float64)
    if law == "negative binomial":
        return rng.negative_binomial(mean / (dispersion - 1.0), 1.0 / dispersion).astype(np.float64)
    if law == "twins":  # a family is one burst or two: dispersion = E K^2 / E K
        share = (dispersion - 1.0) / (3.0 - dispersion)  # of families that are two: (1 + 3 s) / (1 + s) = dispersion
        families = mean / (1.0 + share)
        return (rng.poisson(families * (1.0 - share)) + 2 * rng.poisson(families * share)).astype(np.float64)
    raise ValueError(law)


def clopper_pearson(hits: int, count: int, confidence: float = 0.99) -> tuple[float, float]:
    """Limits of a share (Clopper & Pearson 1934)."""
    tail = (1.0 - confidence) / 2.0
    low = float(betaincinv(hits, count - hits + 1, tail)) if hits else 0.0
    high = float(betaincinv(hits + 1, count - hits, 1.0 - tail)) if hits < count else 1.0
    return low, high


def _mixture(parts: Sequence[object], value: Array, size: Array) -> Array:
    if not parts:
        return np.full(np.broadcast(value, size).shape, -np.inf)
    return np.logaddexp.reduce([p.log_weight + p.gain * value - p.cost * size for p in parts])  # type: ignore[attr-defined]


def log_evidence(band: Band, bursts: Array, track: Array, reach_sum: Array, reach_track: Array) -> Array:
    """``Trial``'s evidence for many bars at once; ``agreement`` holds it against ``Trial`` itself."""
    rate, reach = RateEvidence(band), ReachEvidence(band)
    terms = [_mixture(rate._below, bursts, track), _mixture(rate._above, bursts, track)]
    if reach.usable:
        terms += [_mixture(reach._below, reach_sum, reach_track), _mixture(reach._above, reach_sum, reach_track)]
    return np.logaddexp.reduce(terms)


def window(begin_s: float, bursts: int, track_m: float, reach_mm: float, *, streaks: int = 500) -> Figures:
    """One window's figures."""
    return Figures(
        begin_s=begin_s,
        end_s=begin_s + WINDOW_S,
        frames_seen=50,
        frames_skipped=0,
        streaks=streaks,
        bursts=bursts,
        track_m=track_m,
        exposure_m=track_m,
        burst_rate_per_m=bursts / track_m,
        burst_rate_low_per_m=math.nan,
        burst_rate_high_per_m=math.nan,
        reach_mm=reach_mm,
        reach_low_mm=math.nan,
        reach_high_mm=math.nan,
        cut_share=0.0,
        reach_truncated=False,
        streaks_per_frame=streaks / 50,
        spark_speed_m_s=20.0,
    )


def the_band(*, dispersion: float = 1.0, reach: bool = True) -> Band:
    """The band that the tables are about."""
    return Band(
        grade="taught",
        burst_rate_low_per_m=0.3,
        burst_rate_high_per_m=0.6,
        rate_dispersion=dispersion,
        reach_low_mm=400.0 if reach else None,
        reach_high_mm=500.0 if reach else None,
        reach_noise_mm2_m=30_000.0 if reach else None,
    )


def agreement(seed: int = 1, bars: int = 20) -> float:
    """Largest difference between ``log_evidence`` and ``Trial`` over some bars, one window after the other."""
    rng = np.random.default_rng(seed)
    band = the_band(dispersion=1.5)
    worst = 0.0
    for _ in range(bars):
        trial = Trial(band, false_alarm=1e-300)
        track = rng.uniform(5.0, 25.0, 12)
        bursts = rng.poisson(0.5 * track)
        reaches = rng.normal(470.0, 30.0, 12)
        for number in range(12):
            seen = trial.look(window(number * WINDOW_S, int(bursts[number]), float(track[number]), reaches[number]))
            settled = slice(1, number) if number >= 2 else slice(0, 0)
            ours = log_evidence(
                band,
                np.array(bursts[: number + 1].sum(), dtype=float),
                np.array(track[: number + 1].sum()),
                np.array((track[settled] * reaches[settled]).sum()),
                np.array(track[settled].sum()),
            )
            worst = max(worst, abs(float(ours) - seen.log_evidence))
    return worst


def alarms(
    band: Band,
    *,
    rate_per_m: float,
    reach_mm: float,
    contact_s: float,
    bars: int,
    rng: np.random.Generator,
    law: str = "negative binomial",
    believed: Band | None = None,
) -> int:
    """How many of ``bars`` bars with these true values are ever called nonconforming."""
    windows = round(contact_s / WINDOW_S)
    noise = band.reach_noise_mm2_m or 1.0
    found = 0
    for begin in range(0, bars, 2000):
        count = min(2000, bars - begin)
        strength = np.exp(rng.normal(0.0, 0.2, (count, 1)))  # stream strength from bar to bar
        track = TRACK_M_S * WINDOW_S * strength * np.exp(rng.normal(0.0, 0.1, (count, windows)))
        bursts = counts(rng, rate_per_m * track, band.rate_dispersion, law).cumsum(axis=1)
        reaches = reach_mm + rng.normal(size=track.shape) * np.sqrt(noise / track)
        weighted, settled = track * reaches, track.copy()
        weighted[:, 0] = settled[:, 0] = 0.0
        # a window's reach is used one look later
        reach_sum = np.concatenate([np.zeros((count, 1)), weighted.cumsum(axis=1)[:, :-1]], axis=1)
        reach_track = np.concatenate([np.zeros((count, 1)), settled.cumsum(axis=1)[:, :-1]], axis=1)
        evidence = log_evidence(believed or band, bursts, track.cumsum(axis=1), reach_sum, reach_track)
        found += int((evidence >= -math.log(FALSE_ALARM)).any(axis=1).sum())
    return found


@dataclass(frozen=True)
class Row:
    """One point of a table."""

    name: str
    share: float
    low: float
    high: float


def false_alarm_points(bars: int, contacts: Sequence[float] = (1.0, 10.0, 100.0), seed: int = 11) -> list[Row]:
    """Share of bars called nonconforming at the band's edges and in its middle; 99 % limits."""
    rng = np.random.default_rng(seed)
    rows = []
    for dispersion, law in ((1.0, "Poisson"), (1.5, "negative binomial"), (1.5, "twins"), (3.0, "negative binomial")):
        band = the_band(dispersion=dispersion)
        assert band.reach_low_mm is not None and band.reach_high_mm is not None
        for place, rate, reach in (
            ("lower edges", band.burst_rate_low_per_m, band.reach_low_mm),
            ("upper edges", band.burst_rate_high_per_m, band.reach_high_mm),
            ("upper, lower", band.burst_rate_high_per_m, band.reach_low_mm),
            ("middle", 0.424, 447.0),
        ):
            for contact_s in contacts:
                hits = alarms(band, rate_per_m=rate, reach_mm=reach, contact_s=contact_s, bars=bars, rng=rng, law=law)
                low, high = clopper_pearson(hits, bars)
                rows.append(
                    Row(f"dispersion {dispersion:g} {law:17s} {place:12s} {contact_s:5g} s", hits / bars, low, high)
                )
    return rows


def tracks_to_alert(ratio: float, *, bars: int, reach: bool, seed: int = 12) -> float:
    """Mean track to the alert of bars whose hazard is ``ratio`` times the nearest edge, over Wald's bound.

    A look every twentieth of the bound. Reach, where judged, stays in its band and is of no help.
    """
    rng = np.random.default_rng(seed)
    band = the_band(reach=reach)
    edge = band.burst_rate_high_per_m if ratio > 1.0 else band.burst_rate_low_per_m
    bound = least_mean_track_m(edge, ratio * edge, false_alarm=FALSE_ALARM, miss=MISS)
    step = bound / 20.0
    total, left = 0.0, bars
    while left:
        count = min(left, 2000)
        track = step * np.arange(1, 400 + 1)
        bursts = rng.poisson(ratio * edge * step, (count, track.size)).cumsum(axis=1)
        nothing = np.zeros(bursts.shape)
        hit = log_evidence(band, bursts.astype(float), track, nothing, nothing) >= -math.log(FALSE_ALARM)
        assert hit.any(axis=1).all()
        total += float((hit.argmax(axis=1) + 1).sum()) * step
        left -= count
    return total / bars / bound


def rate_coverage(mean: float, *, bars: int, seed: int = 13) -> float:
    """Share of exact 95 % limits that hold the true rate."""
    rng = np.random.default_rng(seed)
    drawn = rng.poisson(mean, bars)
    known = {int(count): poisson_limits(int(count), 1.0) for count in np.unique(drawn)}
    return float(np.mean([known[int(count)][0] <= mean <= known[int(count)][1] for count in drawn]))


def stream(rng: np.random.Generator, seconds: float, *, sparks_per_s: float = 400.0) -> list[Detections]:
    """Perfect detections of particles that are launched at random, slow down, and glow for some 60 ms each.

    The same particle is seen in a dozen frames: what reach's limits must respect.
    """
    frames = round(seconds * OPTICS.fps)
    count = rng.poisson(sparks_per_s * (seconds + 0.3))
    born = np.sort(rng.uniform(-0.3, seconds, count))
    life = 0.06 * rng.gamma(4.0, 0.25, count)
    speed = 20.0 * rng.normal(1.0, 0.06, count)
    drag = 8.0 * np.exp(rng.normal(0.0, 0.3, count))
    angle = np.radians(OPTICS.direction_deg + rng.normal(0.0, 4.0, count))
    x0, y0 = OPTICS.contact_px
    found = []
    for frame in range(frames):
        begin = frame / OPTICS.fps
        first, last = np.searchsorted(born, [begin - 0.3, begin + OPTICS.exposure_s])
        alive = first + np.flatnonzero(born[first:last] + life[first:last] > begin)
        ages = (np.clip(begin + part - born[alive], 0.0, life[alive]) for part in (0.0, OPTICS.exposure_s))
        near, far = (
            1000.0 * speed[alive] / drag[alive] * -np.expm1(-drag[alive] * age) / OPTICS.mm_per_px for age in ages
        )
        c, s = np.cos(angle[alive]), np.sin(angle[alive])
        streaks = np.stack([x0 + near * c, y0 + near * s, x0 + far * c, y0 + far * s], axis=1)
        found.append(detections(streaks, 0))
    return found


def detections(streaks: NDArray[np.floating], bursts: int) -> Detections:
    """Detections with these streaks (N, 4) in px and so many bursts."""
    count = len(streaks)
    return Detections(
        streaks=np.asarray(streaks, dtype=np.float32).reshape(count, 4),
        streak_snr=np.full(count, 20.0, np.float32),
        streak_flags=np.zeros(count, np.uint8),
        bursts=np.full((bursts, 2), 100.0, np.float32),
        burst_arms=np.full(bursts, 5, np.int16),
        burst_flags=np.zeros(bursts, np.uint8),
        light=DARK,
    )


def tally_of(frames: Sequence[Detections]) -> Figures:
    """Figures of these frames."""
    tally = Tally(OPTICS)
    for number, one in enumerate(frames):
        tally.add(one, t_s=number / OPTICS.fps)
    return tally.figures()


def reach_coverage(seconds: float, *, bars: int, seed: int = 14) -> tuple[float, float]:
    """Share of 95 % limits of reach that hold the true reach, and their mean half-width over the true deviation."""
    rng = np.random.default_rng(seed)
    truth = tally_of(stream(rng, 150.0)).reach_mm
    found = [tally_of(stream(rng, seconds)) for _ in range(bars)]
    inside = np.mean([one.reach_low_mm <= truth <= one.reach_high_mm for one in found])
    width = np.mean([(one.reach_high_mm - one.reach_low_mm) / 2.0 for one in found])
    return float(inside), float(width / (1.96 * np.std([one.reach_mm for one in found])))


@dataclass(frozen=True)
class Population:
    """Bars of one grade: hazard and reach scatter from bar to bar, counts within a bar have a dispersion."""

    grade: str = "grade"
    hazard_per_m: float = 0.45
    scatter: float = 0.1
    reach_mm: float = 450.0
    reach_scatter: float = 0.05
    reach_noise_mm2_m: float = 30_000.0
    dispersion: float = 1.2
    stream_scatter: float = 0.3
    windows: int = 5


@dataclass(frozen=True)
class SimulatedBar:
    """One bar: true values and window figures as arrays."""

    rate_per_m: float
    reach_mm: float
    track: Array
    bursts: Array
    reaches: Array


def draw(population: Population, rng: np.random.Generator) -> SimulatedBar:
    """One bar of the population."""
    rate = population.hazard_per_m * math.exp(rng.normal(0.0, population.scatter))
    reach = population.reach_mm * math.exp(rng.normal(0.0, population.reach_scatter))
    strength = math.exp(rng.normal(0.0, population.stream_scatter))
    track = TRACK_M_S * WINDOW_S * strength * np.exp(rng.normal(0.0, 0.1, population.windows))
    bursts = counts(rng, rate * track, population.dispersion)
    reaches = reach + rng.normal(size=track.size) * np.sqrt(population.reach_noise_mm2_m / track)
    return SimulatedBar(rate, reach, track, bursts, reaches)


def figures_of(bar: SimulatedBar) -> list[Figures]:
    """The bar's windows."""
    return [
        window(number * WINDOW_S, int(bursts), float(track), float(reach))
        for number, (bursts, track, reach) in enumerate(zip(bar.bursts, bar.track, bar.reaches, strict=True))
    ]


def whole(windows: Sequence[Figures]) -> Figures:
    """Windows added up to the bar."""
    from edgewatch.judge.review import joined

    return joined(windows, 1e9)[0]


def reference(number: int, bar: SimulatedBar) -> ReferenceBar:
    """The bar as a reference bar."""
    from edgewatch.judge.teaching import reference_bar

    windows = figures_of(bar)
    return reference_bar(number, "clip", whole(windows), windows)


def taught(population: Population, count: int, rng: np.random.Generator) -> Band:
    """A band taught from ``count`` bars of the population."""
    bars = [reference(number + 1, draw(population, rng)) for number in range(count)]
    return teach(population.grade, bars, optics=OPTICS)


def band_coverage(count: int, population: Population, *, teachings: int, seed: int = 15) -> tuple[float, float]:
    """Share of taught bands that hold 99 % of the true values: burst-rate, reach."""
    rng = np.random.default_rng(seed)
    good = [0, 0]
    for _ in range(teachings):
        band = taught(population, count, rng)
        assert band.reach_low_mm is not None and band.reach_high_mm is not None
        for place, low, high, center, scatter in (
            (0, band.burst_rate_low_per_m, band.burst_rate_high_per_m, population.hazard_per_m, population.scatter),
            (1, band.reach_low_mm, band.reach_high_mm, population.reach_mm, population.reach_scatter),
        ):
            held = ndtr(math.log(high / center) / scatter) - ndtr(math.log(low / center) / scatter)
            good[place] += held >= 0.99
    return good[0] / teachings, good[1] / teachings


GRADES = (
    Population(grade="G08", hazard_per_m=0.08, reach_mm=520.0, windows=20),
    Population(grade="G45", hazard_per_m=0.45, reach_mm=480.0, windows=20),
    Population(grade="G90", hazard_per_m=0.9, reach_mm=450.0, windows=20),
    Population(grade="G220", hazard_per_m=2.2, reach_mm=430.0, windows=20),
)


@dataclass(frozen=True)
class LineResult:
    """Counts of a simulated line."""

    bars: int
    good: int
    good_nonconforming: int
    good_inconclusive: int
    foreign: int
    foreign_conforming: int
    foreign_nonconforming: int


def run_line(expected: int, *, bars: int, references: int = 20, seed: int = 16) -> LineResult:
    """Teach four grades from ``references`` bars each, then judge ``bars`` bars, 5 % of them foreign."""
    rng = np.random.default_rng(seed + expected)
    bands = [taught(grade, references, rng) for grade in GRADES]
    tally = dict.fromkeys(("good", "gn", "gi", "foreign", "fc", "fn"), 0)
    for _ in range(bars):
        is_foreign = rng.random() < 0.05
        others = [place for place in range(len(GRADES)) if place != expected]
        actual = int(rng.choice(others)) if is_foreign else expected
        windows = figures_of(draw(GRADES[actual], rng))
        trial = Trial(bands[expected], bands, false_alarm=FALSE_ALARM, miss=MISS)
        for one in windows:
            trial.look(one)
        verdict = trial.close(whole(windows)).verdict
        if is_foreign:
            tally["foreign"] += 1
            tally["fc"] += verdict == "conforming"
            tally["fn"] += verdict == "nonconforming"
        else:
            tally["good"] += 1
            tally["gn"] += verdict == "nonconforming"
            tally["gi"] += verdict == "inconclusive"
    return LineResult(bars, tally["good"], tally["gn"], tally["gi"], tally["foreign"], tally["fc"], tally["fn"])


def drift_run(shift_per_bar: float, *, seed: int, most: int = 4000, references: int = 50) -> tuple[int, int]:
    """Bars until the reach chart signals, and until reach calls a bar nonconforming, while reach shrinks slowly.

    ``shift_per_bar``: change of the logarithm of reach a bar. ``most`` if never.
    """
    rng = np.random.default_rng(seed)
    population = Population(windows=5)
    band = taught(population, references, rng)
    chart = DriftWatch(band)
    signalled = condemned = most
    for number in range(most):
        bar = draw(population, rng)
        factor = math.exp(shift_per_bar * number)
        trial = Trial(band, false_alarm=FALSE_ALARM)
        windows = [
            window(k * WINDOW_S, int(b), float(t), float(r) * factor)
            for k, (b, t, r) in enumerate(zip(bar.bursts, bar.track, bar.reaches, strict=True))
        ]
        for one in windows:
            trial.look(one)
        if trial.standing.nonconforming:
            if trial.standing.figure == "reach":
                condemned = min(condemned, number)
        elif chart.update(trial.evidence()).causes and signalled == most:
            signalled = number
        if signalled < most and condemned < most:
            break
    return signalled, condemned


def cost_ms(looks: int = 20_000) -> tuple[float, float]:
    """Mean time of a look, and of closing a bar among four grades (ms)."""
    rng = np.random.default_rng(17)
    bands = [taught(grade, 20, rng) for grade in GRADES]
    bars = [figures_of(draw(GRADES[1], rng)) for _ in range(looks // 20)]
    trials = [Trial(bands[1], bands) for _ in bars]
    trials[0].close(whole(bars[0]))
    begun = time.perf_counter()
    for trial, windows in zip(trials, bars, strict=True):
        for one in windows:
            trial.look(one)
    looked = time.perf_counter()
    wholes = [whole(windows) for windows in bars]
    closing = time.perf_counter()
    for trial, bar in zip(trials, wholes, strict=True):
        trial.close(bar)
    return (looked - begun) * 1000.0 / looks, (time.perf_counter() - closing) * 1000.0 / len(bars)


def _part_false_alarms() -> None:
    print(f"False alarms, promised at most {FALSE_ALARM}; {BARS} bars a point, 99 % limits; a look every {WINDOW_S} s")
    for row in false_alarm_points(BARS):
        verdict = "ok" if row.low <= FALSE_ALARM else "TOO MANY"
        print(f"  {row.name}: {row.share:.5f} ({row.low:.5f} to {row.high:.5f}) {verdict}")


def _part_wald() -> None:
    print(f"Mean track to the alert over Wald's bound; {BARS} bars a point; risks {FALSE_ALARM}, {MISS}")
    for ratio in (0.1, 0.5, 2.0, 5.0):
        values = [tracks_to_alert(ratio, bars=BARS, reach=reach) for reach in (False, True)]
        print(f"  hazard ratio {ratio:g}: {values[0]:.3f} (burst-rate alone), {values[1]:.3f} (with reach)")


def _part_coverage() -> None:
    print("Coverage of the 95 % limits of burst-rate")
    for mean in (0.5, 2.0, 5.0, 20.0, 100.0, 1000.0):
        print(f"  mean count {mean:g}: {rate_coverage(mean, bars=BARS):.4f}")
    print("Coverage of the 95 % limits of reach, and their width over the ideal one (1000 stretches a point)")
    for seconds in (0.25, 0.5, 1.0, 2.0, 5.0):
        inside, width = reach_coverage(seconds, bars=1000)
        print(f"  {seconds:g} s: {inside:.3f}, width {width:.2f}")


def _part_bands() -> None:
    print("Share of taught bands that hold 99 % of bars' true values (promised 0.95): burst-rate, reach; 500 a point")
    for count in (5, 10, 20, 50):
        for windows, hazard in ((5, 0.08), (5, 0.45), (20, 2.2)):
            for scatter in (0.05, 0.2):
                found = band_coverage(
                    count, Population(hazard_per_m=hazard, windows=windows, scatter=scatter), teachings=500
                )
                mean = hazard * windows * WINDOW_S * TRACK_M_S
                print(f"  {count:3d} bars of {mean:5.1f} bursts, scatter {scatter:g}: {found[0]:.3f}, {found[1]:.3f}")


def _part_line() -> None:
    print(f"A line of four taught grades (20 reference bars each), 5 % foreign, {BARS} bars an expected grade")
    for expected, grade in enumerate(GRADES):
        found = run_line(expected, bars=BARS)
        print(
            f"  {grade.grade}: false alarms {found.good_nonconforming}/{found.good}, inconclusive "
            f"{found.good_inconclusive}/{found.good}; foreign called conforming {found.foreign_conforming}/"
            f"{found.foreign}, nonconforming {found.foreign_nonconforming}/{found.foreign}"
        )


def _part_drift() -> None:
    print("Drift of reach, 20 lines each: median bars to the chart's signal, and to the first bar condemned by reach")
    for shift in (0.0, -0.0002, -0.0005, -0.001):
        found = np.array([drift_run(shift, seed=100 + k) for k in range(20)])
        print(f"  {shift * 100:+.2f} % a bar: {np.median(found[:, 0]):.0f}, {np.median(found[:, 1]):.0f}")


def _part_outliers() -> None:
    print("A wrong bar among 20 references: share of teachings that name it; share that name any among good ones")
    rng = np.random.default_rng(18)
    for ratio in (1.5, 2.0, 3.0):
        named = 0
        for _ in range(500):
            bars = [reference(k + 1, draw(Population(), rng)) for k in range(19)]
            bars.append(reference(20, draw(Population(hazard_per_m=0.45 * ratio), rng)))
            named += any(one.number == 20 for one in find_outliers(bars))
        print(f"  hazard {ratio:g} times: {named / 500:.3f}")
    wrong = sum(
        bool(find_outliers([reference(k + 1, draw(Population(), rng)) for k in range(20)])) for _ in range(1000)
    )
    print(f"  none wrong: {wrong / 1000:.3f}")


def _part_cost() -> None:
    look, close = cost_ms()
    print(f"Cost: {look:.4f} ms a window, {close:.3f} ms to close a bar")


PARTS: dict[str, Callable[[], None]] = {
    "false_alarms": _part_false_alarms,
    "wald": _part_wald,
    "coverage": _part_coverage,
    "bands": _part_bands,
    "line": _part_line,
    "drift": _part_drift,
    "outliers": _part_outliers,
    "cost": _part_cost,
}


def main(names: Sequence[str]) -> None:
    """Print the tables."""
    print(
        f"{platform.machine()}, Python {platform.python_version()}, numpy {np.__version__}, scipy {scipy.__version__}"
    )
    print(f"largest difference between the bench's evidence and Trial's: {agreement():.2e}")
    for name in names or PARTS:
        begun = time.perf_counter()
        PARTS[name]()
        print(f"  [{name}: {time.perf_counter() - begun:.0f} s]", flush=True)


if __name__ == "__main__":
    main(sys.argv[1:])
