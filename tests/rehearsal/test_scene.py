"""Pictures and truth agree: what is said to be there is there, and moves as said."""

from __future__ import annotations

import math
from dataclasses import fields, replace

import numpy as np
import pytest

from edgewatch.rehearsal.camera import CameraModel
from edgewatch.rehearsal.scene import Scene, Stream
from edgewatch.rehearsal.steel import find_steel
from edgewatch.rehearsal.swarm import Conditions, Spray
from edgewatch.rehearsal.truth import Truth
from edgewatch.sight.optics import Optics

OPTICS = Optics(
    width_px=640, height_px=400, mm_per_px=1.0, contact_px=(30.0, 200.0), direction_deg=0.0, exposure_ms=2.5, fps=200.0
)
CLEAR = CameraModel(haze_dn=0.0, read_noise_e=5.0, wheel_glow_dn=0.0, bloom=0.0, psf_wing_share=0.0, flicker=0.0)


def stream(steel: str = "C45", *, seed: int = 1, optics: Optics = OPTICS, **options: object) -> Stream:
    """A steady stream."""
    return Stream(optics, find_steel(steel), rng=np.random.default_rng(seed), **options)  # type: ignore[arg-type]


def lonely(truth: Truth) -> list[int]:
    """Streaks that stand well apart from all others and from every burst."""
    found = []
    middle = 0.5 * (truth.streaks[:, :2] + truth.streaks[:, 2:])
    length = np.hypot(*(truth.streaks[:, 2:] - truth.streaks[:, :2]).T)
    for row in range(len(middle)):
        apart = np.hypot(*(middle - middle[row]).T)
        apart[row] = np.inf
        clear_of_streaks = (apart > 0.5 * (length + length[row]) + 20.0).all()
        bursts_apart = np.hypot(*(truth.bursts - middle[row]).T) if len(truth.bursts) else np.array([np.inf])
        if clear_of_streaks and (bursts_apart > 0.5 * length[row] + 60.0).all():
            found.append(row)
    return found


def test_the_same_seed_gives_the_same_pictures() -> None:
    """Pictures and every field of the truth, for ten frames; another seed differs."""
    one, two, other = stream(seed=4), stream(seed=4), stream(seed=5)
    for _ in range(10):
        (picture, truth), (again, truth_again), (different, _) = one.frame(), two.frame(), other.frame()
        assert np.array_equal(picture, again)
        assert not np.array_equal(picture, different)
        for part in fields(Truth):
            assert np.array_equal(getattr(truth, part.name), getattr(truth_again, part.name)), part.name


def test_pictures_have_the_size_and_type_of_a_camera() -> None:
    """Mono, 8 bit, rows by columns, for odd sizes too."""
    optics = replace(OPTICS, width_px=333, height_px=241)
    picture, _ = stream(optics=optics).frame()
    assert picture.shape == (241, 333)
    assert picture.dtype == np.uint8


def test_streaks_are_where_the_truth_says_and_as_high() -> None:
    """Along lonely lines the picture stands as high as said; beyond their ends and beside them it is ground."""
    source = stream(seed=8, sparks_per_s=500.0, camera=CLEAR)
    measured, said, beside, beyond = [], [], [], []
    noise = float(CLEAR.noise_dn(np.array(CLEAR.dark_dn)))
    for _ in range(60):
        picture, truth = source.frame()
        for row in lonely(truth):
            x0, y0, x1, y1 = (float(v) for v in truth.streaks[row])
            length = math.hypot(x1 - x0, y1 - y0)
            if not (length > 20.0 and x0 > 20 and x1 < 610 and min(y0, y1) > 20 and max(y0, y1) < 380):
                continue
            if not 10.0 < truth.streak_snr[row] < 0.8 * (255 - CLEAR.dark_dn) / noise:
                continue
            along = np.linspace(0.1, 0.9, 9)
            ux, uy = (x1 - x0) / length, (y1 - y0) / length
            tops = []
            for part in along:
                x, y = x0 + part * (x1 - x0), y0 + part * (y1 - y0)
                # the profile across, a pixel apart: its sum over the spread's width is the height
                across = [sample(picture, x - k * uy, y + k * ux) - CLEAR.dark_dn for k in np.arange(-4, 4.5, 0.5)]
                tops.append(0.5 * sum(across) / (CLEAR.psf_sigma_px * math.sqrt(2.0 * math.pi)))
            measured.append(float(np.median(tops)))
            said.append(float(truth.streak_snr[row]) * noise)
            beside.append(sample(picture, 0.5 * (x0 + x1) - 9 * uy, 0.5 * (y0 + y1) + 9 * ux) - CLEAR.dark_dn)
            beyond.append(sample(picture, x0 - 5 * ux, y0 - 5 * uy) - CLEAR.dark_dn)
    assert len(said) > 40
    assert np.median(np.array(measured) / np.array(said)) == pytest.approx(1.0, abs=0.04)
    assert np.percentile(np.abs(np.array(measured) / np.array(said) - 1.0), 90) < 0.15
    assert abs(np.mean(beside)) < noise
    assert abs(np.median(beyond)) < 2 * noise


def sample(picture: np.ndarray, x: float, y: float) -> float:
    """Bilinear value at (x, y)."""
    column, row = math.floor(x), math.floor(y)
    u, v = x - column, y - row
    patch = picture[row : row + 2, column : column + 2].astype(float)
    return float(
        patch[0, 0] * (1 - u) * (1 - v) + patch[0, 1] * u * (1 - v) + patch[1, 0] * (1 - u) * v + patch[1, 1] * u * v
    )


def test_a_particle_moves_on_from_frame_to_frame() -> None:
    """Linked by flight number, the contact end advances by speed times the period, for every particle that lasts."""
    source = stream(seed=2, sparks_per_s=2000.0, optics=replace(OPTICS, fps=1000.0, exposure_ms=0.9))
    _, before = source.frame()
    compared = 0
    for _ in range(20):
        _, after = source.frame()
        struck = set(before.burst_flight.tolist()) | set(after.burst_flight.tolist())
        rows = {number: row for row, number in enumerate(before.flight.tolist())}
        for row, number in enumerate(after.flight.tolist()):
            if (
                number not in rows
                or number in struck
                or min(before.streak_snr[rows[number]], after.streak_snr[row]) < 8
            ):
                continue
            was, now = before.streaks[rows[number]], after.streaks[row]
            if not (was[0] > 40 and now[2] < 600 and abs(now[1] - 200) < 180):
                continue
            step = math.hypot(float(now[0] - was[0]), float(now[1] - was[1]))
            assert step == pytest.approx(float(before.speed_m_s[rows[number]]), rel=0.08)  # mm a ms
            compared += 1
        before = after
    assert compared > 100


def test_streak_length_is_speed_times_exposure() -> None:
    """Far from the ends of flights, lines are as long as the exposure lets them be."""
    source = stream(seed=3, steel="C15")
    ratios = []
    for _ in range(20):
        _, truth = source.frame()
        length = np.hypot(*(truth.streaks[:, 2:] - truth.streaks[:, :2]).T)
        whole = (truth.streak_snr > 10) & (truth.streaks[:, 0] > 120) & (truth.streaks[:, 2] < 500)
        ratios.append(length[whole] / (truth.speed_m_s[whole] * 2.5))
    assert np.median(np.concatenate(ratios)) == pytest.approx(1.0, abs=0.01)


def test_the_true_hazard_is_the_steels() -> None:
    """Bursts that went off during exposures, per exposed metre, for a low and a high hazard."""
    for name, frames in (("C45", 150), ("C80", 100)):
        source = stream(name, seed=6)
        seen: set[int] = set()
        exposed = 0.0
        for _ in range(frames):
            _, truth = source.frame()
            seen |= set(truth.burst_id[~truth.late].tolist())
            exposed += truth.track_exposed_m
        hazard = find_steel(name).hazard_per_m
        assert len(seen) == pytest.approx(hazard * exposed, abs=3.5 * math.sqrt(hazard * exposed))


def test_a_burst_keeps_its_number_and_is_first_once() -> None:
    """At 1000 frames a second one burst glows through several frames."""
    source = stream("C80", seed=7, optics=replace(OPTICS, fps=1000.0, exposure_ms=0.9))
    first: dict[int, int] = {}
    shown: dict[int, int] = {}
    place: dict[int, np.ndarray] = {}
    for _ in range(60):
        _, truth = source.frame()
        for row, number in enumerate(truth.burst_id.tolist()):
            first[number] = first.get(number, 0) + int(truth.first[row])
            shown[number] = shown.get(number, 0) + 1
            assert place.setdefault(number, truth.bursts[row]) == pytest.approx(truth.bursts[row], abs=0.01)
            assert truth.late[row] == (truth.burst_t_s[row] < truth.t_s)
            assert truth.drew_ms[row] <= 0.9 + 1e-6
    assert set(first.values()) == {1}
    assert max(shown.values()) >= 2


def test_high_carbon_bursts_repeat() -> None:
    """In a high carbon stream some particles burst again and again, under their own number; in a low one hardly any."""

    def repeats(name: str) -> float:
        source = stream(name, seed=10, sparks_per_s=1500.0)
        of_flight: dict[int, set[int]] = {}
        for _ in range(120):
            _, truth = source.frame()
            for flight, burst in zip(truth.burst_flight.tolist(), truth.burst_id.tolist(), strict=True):
                of_flight.setdefault(flight, set()).add(burst)
        return sum(len(found) > 1 for found in of_flight.values()) / len(of_flight)

    assert repeats("C80") > 0.08
    assert repeats("C15") < 0.03


def test_arms_are_bright_round_a_burst() -> None:
    """Near bursts that drew long the picture is brighter than at the same distance elsewhere."""
    source = stream("C80", seed=9, sparks_per_s=1500.0)
    near = []
    for _ in range(40):
        picture, truth = source.frame()
        for row in np.flatnonzero((truth.drew_ms > 1.0) & ~truth.late & (truth.bursts[:, 0] > 100)):
            x, y = (round(float(v)) for v in truth.bursts[row])
            if 20 < y < 380 and x < 620:
                near.append(picture[y - 12 : y + 13, x - 12 : x + 13].max())
    assert len(near) > 10
    assert np.percentile(near, 10) > 60


def test_the_light_of_a_burst_flies_on_from_where_it_burst() -> None:
    """Its middle lies down the stream, farther for a late burst, and the picture is bright there."""
    source = stream("C45", seed=11, sparks_per_s=1000.0)
    flown: dict[bool, list[float]] = {False: [], True: []}
    bright = []
    for _ in range(150):
        picture, truth = source.frame()
        for row in np.flatnonzero(truth.drew_ms > 0.35):
            gap = truth.burst_light[row] - truth.bursts[row]
            flown[bool(truth.late[row])].append(float(gap @ OPTICS.axis))
            x, y = (round(float(v)) for v in truth.burst_light[row])
            if not truth.late[row] and 10 < y < OPTICS.height_px - 10 and 10 < x < OPTICS.width_px - 10:
                bright.append(int(picture[y - 6 : y + 7, x - 6 : x + 7].max()))
    assert min(len(flown[False]), len(flown[True])) > 15
    assert 0.0 < np.median(flown[False]) < np.median(flown[True]) < 40.0
    assert np.percentile(bright, 10) > 40


@pytest.mark.parametrize("direction", [90.0, 180.0, -135.0])
def test_the_stream_turns_with_its_axis(direction: float) -> None:
    """In any direction the streaks run along the axis, contact end first."""
    optics = replace(OPTICS, width_px=640, height_px=640, contact_px=(320.0, 320.0), direction_deg=direction)
    source = stream(optics=optics, sparks_per_s=2000.0, spray=Spray(stray_share=0.0))
    ax, ay = optics.axis
    _, truth = source.frame()
    way = truth.streaks[:, 2:] - truth.streaks[:, :2]
    along = way[:, 0] * ax + way[:, 1] * ay
    assert len(along) > 20
    assert (along > 0.9 * np.hypot(*way.T)).all()
    assert np.median(optics.along_mm(truth.streaks[:, :2])) > 50.0


def test_lines_end_at_the_edge() -> None:
    """No truth lies outside the picture, whatever the contact point and direction."""
    optics = replace(OPTICS, contact_px=(-100.0, 40.0), direction_deg=20.0)
    source = stream(optics=optics)
    for _ in range(10):
        _, truth = source.frame()
        assert truth.streaks[:, ::2].min(initial=0.0) >= -0.5
        assert truth.streaks[:, ::2].max(initial=0.0) <= 639.5
        assert truth.streaks[:, 1::2].min(initial=0.0) >= -0.5
        assert truth.streaks[:, 1::2].max(initial=0.0) <= 399.5


def test_a_rolling_shutter_sees_lower_rows_later() -> None:
    """Against a global shutter each streak is shifted by its speed times the delay of its rows."""
    row_us = 10.0
    still = stream(seed=12, sparks_per_s=1500.0, camera=CLEAR)
    rolling = stream(seed=12, sparks_per_s=1500.0, camera=replace(CLEAR, row_us=row_us))
    shifts, delays = [], []
    _, a = still.frame()
    _, b = rolling.frame()
    rows = {number: row for row, number in enumerate(a.flight.tolist())}
    for row, number in enumerate(b.flight.tolist()):
        if (
            number in rows
            and min(a.streak_snr[rows[number]], b.streak_snr[row]) > 8
            and a.streaks[rows[number], 0] > 60
        ):
            shifts.append(float(b.streaks[row, 0] - a.streaks[rows[number], 0]))
            delays.append(float(b.streaks[row, 1]) * row_us * 1e-3 * float(b.speed_m_s[row]))
    assert len(shifts) > 5
    assert np.median(np.array(shifts) / np.array(delays)) == pytest.approx(1.0, abs=0.1)


def test_vibration_moves_truth_and_picture_together() -> None:
    """With shaking the truth still lies on the light."""
    source = stream(seed=8, sparks_per_s=400.0, camera=replace(CLEAR, vibration_px=5.0))
    noise = float(CLEAR.noise_dn(np.array(CLEAR.dark_dn)))
    on = []
    for _ in range(40):
        picture, truth = source.frame()
        for row in lonely(truth):
            x, y = 0.5 * (truth.streaks[row, :2] + truth.streaks[row, 2:])
            if truth.streak_snr[row] > 15 and 5 < x < 630 and 5 < y < 390:
                height = sample(picture, float(x), float(y)) - CLEAR.dark_dn
                on.append(height / (float(truth.streak_snr[row]) * noise))
    assert len(on) > 15
    assert np.percentile(on, 5) > 0.6  # a shake of a few px beside the light would leave nothing


def test_between_bars_there_is_nothing() -> None:
    """Before, between and long after contacts: no streak, no burst, only ground."""
    steel = find_steel("C45")
    stretches = [
        Conditions(begin_s=0.1, end_s=0.2, steel=steel, sparks_per_s=3000.0),
        Conditions(begin_s=0.6, end_s=0.7, steel=steel, sparks_per_s=3000.0),
    ]
    scene = Scene(OPTICS, stretches, rng=np.random.default_rng(1))
    count = np.array([len(scene.frame()[1].streaks) for _ in range(200)])
    t_s = np.arange(200) * OPTICS.period_s
    assert (count[t_s + OPTICS.exposure_s < 0.1] == 0).all()
    assert (count[(t_s > 0.115) & (t_s < 0.2)] > 20).all()
    assert (count[(t_s > 0.5) & (t_s < 0.595)] == 0).all()
    assert (count[(t_s > 0.615) & (t_s < 0.7)] > 20).all()
    assert (count[t_s > 0.98] == 0).all()


@pytest.mark.parametrize(
    "optics",
    [
        replace(OPTICS, mm_per_px=0.001),
        replace(OPTICS, mm_per_px=100.0),
        replace(OPTICS, contact_px=(-60_000.0, 60_000.0)),
        replace(OPTICS, fps=1.0, exposure_ms=1000.0),
        replace(OPTICS, fps=100_000.0, exposure_ms=0.001),
        replace(OPTICS, width_px=16, height_px=16),
    ],
)
def test_any_allowed_optics_give_pictures(optics: Optics) -> None:
    """From micrometres to metres a pixel, from microseconds to a second: pictures and finite truth, no warning."""
    source = stream(optics=optics, sparks_per_s=1000.0)
    for _ in range(2):
        picture, truth = source.frame()
        assert picture.shape == (optics.height_px, optics.width_px)
        assert np.isfinite(truth.streaks).all()
        assert np.isfinite(truth.streak_snr).all()
        assert math.isfinite(truth.track_m)


def test_skipped_frames_pass_unseen() -> None:
    """After skipping, the time goes on and the stream is there."""
    source = stream()
    source.frame()
    source.skip(9)
    _, truth = source.frame()
    assert truth.t_s == pytest.approx(10 / 200)
    assert len(truth.streaks) > 30
    with pytest.raises(ValueError, match="frames"):
        source.skip(-1)


def test_memory_does_not_grow() -> None:
    """The tables hold what is under way, not what has been."""
    source = stream("C80", sparks_per_s=3000.0)
    sizes = []
    for _ in range(8):
        for _ in range(25):
            source.frame()
        swarm = source._swarm
        sizes.append(len(swarm.pieces) + len(swarm.arms) + len(swarm.bursts) + len(swarm._tables["x"]))
    assert max(sizes[4:]) < 1.6 * max(sizes[:4])


@pytest.mark.parametrize(
    ("make", "named"),
    [
        (lambda: Spray(slip=0.0), "slip"),
        (lambda: Spray(stray_share=2.0), "stray_share"),
        (lambda: Spray(angle_sd_deg=float("nan")), "angle_sd_deg"),
        (lambda: Conditions(begin_s=1.0, end_s=1.0, steel=None, sparks_per_s=0.0), "begin_s"),
        (lambda: Conditions(begin_s=0.0, end_s=1.0, steel=None, sparks_per_s=-5.0), "sparks_per_s"),
        (lambda: Conditions(begin_s=0.0, end_s=1.0, steel=None, sparks_per_s=1.0, wheel_speed_m_s=0.0), "wheel_speed"),
        (lambda: stream(wheel_speed_m_s=1e4), "wheel_speed"),
        (lambda: stream(sparks_per_s=1e9), "sparks_per_s"),
    ],
)
def test_impossible_scenes_are_refused_by_name(make: object, named: str) -> None:
    """Every value out of range names itself."""
    with pytest.raises(ValueError, match=named):
        make()  # type: ignore[operator]
