"""``edgewatch review``: journalled bars judged again under other bands or risks; shows what would change."""

from __future__ import annotations

import argparse
import dataclasses
import json
import math
from collections.abc import Iterable, Iterator, Mapping
from pathlib import Path
from typing import Any

from edgewatch.commands.measuring import check_number_options
from edgewatch.commands.options import add_bands, add_station, load_settings
from edgewatch.errors import SettingsError
from edgewatch.figures.values import Figures
from edgewatch.judge.review import PastBar, Reviewed, Tallied, review, tallied
from edgewatch.record.bandfiles import load_bands
from edgewatch.record.journal import Row
from edgewatch.record.reading import read_findings, read_records

EXAMPLE = "edgewatch review --journal shift.sqlite --bands new-bands --false-alarm 0.0005"


def declare(parser: argparse.ArgumentParser) -> None:
    """Options of ``review``."""
    add_station(parser)
    parser.add_argument("--journal", metavar="FILE", help="journal file (overrides journal.file)")
    add_bands(parser)
    parser.add_argument("--false-alarm", type=float, metavar="F", help="try this risk (overrides judge.false_alarm)")
    parser.add_argument("--miss", type=float, metavar="F", help="try this risk (overrides judge.miss)")
    parser.add_argument("--window-s", type=float, metavar="F", help="join windows to at least this long (s)")
    parser.add_argument("--all", action="store_true", help="list every bar, not only those that would change")
    parser.add_argument("--json", action="store_true", help="one JSON object")


def run(args: argparse.Namespace) -> int:
    """Run ``review``."""
    check_number_options({"--false-alarm": args.false_alarm, "--miss": args.miss}, 1e-6, 0.2)
    check_number_options({"--window-s": args.window_s}, 0.02, 600.0)
    settings, folder = load_settings(args)
    path = folder / settings.journal.file
    folder_of_bands = folder / settings.judge.bands
    bands = load_bands(folder_of_bands)
    if not bands:
        raise SettingsError(f"judge.bands = {settings.judge.bands!r}: {folder_of_bands} holds no band file")
    findings = {bar: finding.grade for bar, finding in read_findings(path).items()}
    past = list(past_bars(read_records(path, ("window", "bar")), findings))
    judge = settings.judge
    found = review(
        past,
        bands,
        false_alarm=judge.false_alarm if args.false_alarm is None else args.false_alarm,
        miss=judge.miss if args.miss is None else args.miss,
        least_streaks=judge.least_streaks,
        window_s=args.window_s,
    )
    before = tallied((one.past, one.past.verdict) for one in found)
    after = tallied((one.past, one.now.verdict) for one in found)
    if args.json:
        print(json.dumps(_body(found, before, after), allow_nan=False))
    else:
        _print(found, before, after, everything=args.all, path=path)
    return 0


def past_bars(rows: Iterable[Row], findings: Mapping[int, str]) -> Iterator[PastBar]:
    """Bars with their windows, in the order of the journal. Bar numbers may begin anew; a window belongs to the next
    bar of its number. Records that lack figures are left out.
    """
    windows: dict[int, list[Figures]] = {}
    newest: dict[int, PastBar] = {}
    order: list[PastBar] = []
    for row in rows:
        number = row.payload.get("bar")
        figures = figures_from(row.payload)
        if not isinstance(number, int) or figures is None:
            continue
        if row.kind == "window":
            windows.setdefault(number, []).append(figures)
            continue
        one = PastBar(
            number=number,
            expected=str(row.payload.get("expected", "")),
            verdict=str(row.payload.get("verdict", "")),
            causes=tuple(str(cause) for cause in row.payload.get("causes", ())),
            bar=figures,
            windows=tuple(windows.pop(number, ())),
        )
        order.append(one)
        newest[number] = one
    for one in order:  # the laboratory's finding is of the newest bar of that number
        yield dataclasses.replace(one, confirmed=findings.get(one.number, "") if newest[one.number] is one else "")


def figures_from(payload: Mapping[str, Any]) -> Figures | None:
    """Figures of a journalled payload, null as NaN; ``None`` where one is missing or of another type."""
    values: dict[str, Any] = {}
    for part in dataclasses.fields(Figures):
        value = payload.get(part.name, part.default)
        if value is dataclasses.MISSING:
            return None
        if value is None:
            value = math.nan
        if not isinstance(value, (int, float)):
            return None
        values[part.name] = value
    return Figures(**values)


def _changed(found: Iterable[Reviewed]) -> list[Reviewed]:
    return [one for one in found if one.changed]


def _body(found: list[Reviewed], before: Tallied, after: Tallied) -> dict[str, Any]:
    return {
        "bars": len(found),
        "before": dataclasses.asdict(before),
        "after": dataclasses.asdict(after),
        "changed": [
            {
                "bar": one.past.number,
                "expected": one.past.expected,
                "confirmed": one.past.confirmed or None,
                "before": one.past.verdict,
                "after": one.now.verdict,
                "causes": list(one.now.causes),
                "nearest": [list(pair) for pair in one.now.nearest],
            }
            for one in _changed(found)
        ],
    }


def _print(found: list[Reviewed], before: Tallied, after: Tallied, *, everything: bool, path: Path) -> None:
    if not found:
        print(f"{path}: holds no bars")
        return
    for one in found if everything else _changed(found):
        laboratory = f", laboratory {one.past.confirmed}" if one.past.confirmed else ""
        causes = f" ({', '.join(one.now.causes)})" if one.now.causes else ""
        print(
            f"bar {one.past.number}: expected {one.past.expected or '-'}{laboratory}: "
            f"{one.past.verdict} -> {one.now.verdict}{causes}"
        )
    print(f"{len(found)} bars, {len(_changed(found))} would change")
    for name, counts in (("before", before), ("after", after)):
        verdicts = ", ".join(f"{count} {verdict}" for verdict, count in sorted(counts.verdicts.items()))
        print(f"{name}: {verdicts}; of {counts.confirmed} confirmed: {counts.false_alarms} false alarms, ", end="")
        print(f"{counts.misses} misses")
