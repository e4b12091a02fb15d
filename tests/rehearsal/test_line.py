"""The simulated line: as many bars as asked for, foreign ones where drawn, contacts in order."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest

from edgewatch.rehearsal.line import Line, Scatter


def plan(seed: int = 1, **changes: object) -> Line:
    """A line with defaults."""
    options: dict[str, object] = {
        "bars": 12,
        "foreign": 2,
        "grade": "C45",
        "foreign_grades": ("C15", "C80"),
        "rng": np.random.default_rng(seed),
    }
    return Line(**(options | changes))  # type: ignore[arg-type]


def test_bars_come_one_after_the_other() -> None:
    """Numbers from 1, contacts of about the time asked for, pauses between, in every line."""
    for seed in range(20):
        line = plan(seed, contact_s=1.2, pause_s=0.5)
        bars = [line[index] for index in range(len(line))]
        assert [bar.number for bar in bars] == list(range(1, 13))
        lengths = np.array([bar.end_s - bar.begin_s for bar in bars])
        assert lengths.mean() == pytest.approx(1.2, rel=0.1)
        gaps = np.array([after.begin_s - before.end_s for before, after in pairwise(bars)])
        assert (gaps > 0.3).all()
        assert line.end_s == pytest.approx(bars[-1].end_s + 0.5)


def test_foreign_bars_are_as_many_as_asked_and_never_first() -> None:
    """Grades in turn; the rest is what is expected."""
    for seed in range(30):
        line = plan(seed, foreign=3)
        foreign = [bar for bar in (line[k] for k in range(12)) if bar.foreign]
        assert [bar.grade for bar in foreign] == ["C15", "C80", "C15"]
        assert not line[0].foreign
        assert {bar.expected for bar in foreign} == {"C45"}


def test_seeds_move_the_foreign_bars() -> None:
    """Other seeds, other places; same seed, same line."""
    places = {tuple(k for k in range(12) if line[k].foreign) for line in (plan(seed) for seed in range(10))}
    assert len(places) > 4
    assert [plan(3)[k] for k in range(12)] == [plan(3)[k] for k in range(12)]


def test_bars_of_one_grade_scatter() -> None:
    """Hazard and stream scatter with the deviation asked for; without scatter bars are alike."""
    line = plan(bars=2000, foreign=0, scatter=Scatter(hazard=0.06, stream=0.2))
    hazards = np.log([line[k].steel.hazard_per_m for k in range(2000)])
    streams = np.log([line[k].sparks_per_s for k in range(2000)])
    assert hazards.std() == pytest.approx(0.06, rel=0.1)
    assert hazards.mean() == pytest.approx(np.log(0.9), abs=0.01)
    assert streams.std() == pytest.approx(0.2, rel=0.1)
    alike = plan(foreign=0, scatter=Scatter(hazard=0, stream=0, radius=0, contact=0, press=0, launch_k=0))
    assert len({alike[k].steel for k in range(12)}) == 1


def test_the_wheel_wears_from_the_first_bar_to_the_last() -> None:
    """Evenly, from full to the speed asked for."""
    line = plan(bars=101, foreign=0, wheel_speed_m_s=30.0, worn_speed_m_s=20.0)
    assert line[0].wheel_speed_m_s == pytest.approx(30.0)
    assert line[50].wheel_speed_m_s == pytest.approx(25.0)
    assert line[100].wheel_speed_m_s == pytest.approx(20.0)


def test_conditions_cover_the_contacts_and_nothing_else() -> None:
    """Stretches in order, without overlap; each contact is covered whole; it begins weak."""
    line = plan()
    stretches = list(line.conditions())
    for before, after in pairwise(stretches):
        assert before.end_s <= after.begin_s + 1e-9
    covered = sum(stretch.end_s - stretch.begin_s for stretch in stretches)
    assert covered == pytest.approx(sum(line[k].end_s - line[k].begin_s for k in range(12)))
    firsts = [s for s in stretches if any(abs(s.begin_s - line[k].begin_s) < 1e-12 for k in range(12))]
    assert len(firsts) == 12
    assert np.mean([s.sparks_per_s for s in firsts]) < 0.7 * np.mean([s.sparks_per_s for s in stretches])


def test_begun_counts_contacts() -> None:
    """None at the start, one within the first, all at the end."""
    line = plan()
    assert line.begun(0.0) == 0
    assert line.begun(line[0].begin_s) == 1
    assert line.begun(line[4].end_s) == 5
    assert line.begun(line.end_s) == 12


def test_a_million_bars_are_planned_at_once() -> None:
    """Bars are made when asked for."""
    line = plan(bars=1_000_000, foreign=1000)
    assert line[999_999].number == 1_000_000
    assert next(iter(line.conditions())).begin_s == line[0].begin_s


@pytest.mark.parametrize(
    ("field", "value"),
    [
        ("bars", 0),
        ("bars", 10**9),
        ("foreign", 13),
        ("foreign", -1),
        ("foreign_grades", ()),
        ("contact_s", 0.0),
        ("pause_s", float("nan")),
        ("wheel_speed_m_s", 0.0),
        ("worn_speed_m_s", 500.0),
        ("sparks_per_s", 0.0),
        ("grade", "soap"),
        ("foreign_grades", ("soap",)),
    ],
)
def test_impossible_lines_are_refused_by_name(field: str, value: object) -> None:
    """Every value out of range names itself."""
    with pytest.raises(ValueError, match="steel" if value in ("soap", ("soap",)) else field):
        plan(**{field: value})


@pytest.mark.parametrize("field", ["hazard", "stream", "radius", "contact", "press", "launch_k"])
def test_impossible_scatter_is_refused_by_name(field: str) -> None:
    """Negative deviations."""
    with pytest.raises(ValueError, match=field):
        Scatter(**{field: -0.1})
