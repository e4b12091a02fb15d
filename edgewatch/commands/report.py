"""Pictures for the desk: what was taught, which grades differ. Needs matplotlib (extra ``desk``)."""

from __future__ import annotations

import base64
import html
import io
import math
from collections.abc import Sequence
from pathlib import Path
from typing import Any

from edgewatch.errors import DeviceError
from edgewatch.judge.bands import Band
from edgewatch.judge.contrast import Pair
from edgewatch.judge.teaching import remarks


def _figure(width: float, height: float) -> Any:
    """A figure that draws without a display. Raises ``DeviceError`` where matplotlib is missing."""
    try:
        from matplotlib.backends.backend_agg import FigureCanvasAgg
        from matplotlib.figure import Figure
    except ImportError as error:
        raise DeviceError("plots need matplotlib: install edgewatch[desk]") from error
    figure = Figure(figsize=(width, height), layout="constrained")
    FigureCanvasAgg(figure)
    return figure


def _save(path: Path, content: bytes) -> None:
    try:
        path.write_bytes(content)
    except OSError as error:
        raise DeviceError(f"{path}: cannot be written: {error.strerror or error}") from error


def _png(figure: Any) -> bytes:
    out = io.BytesIO()
    figure.savefig(out, format="png", dpi=110)
    return out.getvalue()


def write_report(path: Path, band: Band) -> None:
    """One HTML file that shows what was taught: bars, band, scatter, remarks."""
    figure = _figure(9.0, 6.5 if band.has_reach else 3.5)
    panels = figure.subplots(2 if band.has_reach else 1, 1, squeeze=False)[:, 0]
    _draw_bars(panels[0], band, "burst-rate (1/m)", band.burst_rate_low_per_m, band.burst_rate_high_per_m)
    if band.has_reach and band.reach_low_mm is not None and band.reach_high_mm is not None:
        _draw_bars(panels[1], band, "reach (mm)", band.reach_low_mm, band.reach_high_mm)
    picture = base64.b64encode(_png(figure)).decode()
    rows = "".join(
        f"<tr><td>{bar.number}</td><td>{html.escape(bar.clip)}</td><td>{bar.begin_s:.2f}</td><td>{bar.bursts}</td>"
        f"<td>{bar.track_m:.1f}</td><td>{bar.bursts / bar.exposure_m:.3f}</td><td>{_number(bar.reach_mm)}</td>"
        f"<td>{_number(bar.spark_speed_m_s, 1)}</td><td>{'left out' if bar.left_out else ''}</td></tr>"
        for bar in band.bars
        if bar.exposure_m > 0.0
    )
    notes = "".join(f"<li>{html.escape(remark)}</li>" for remark in remarks(band))
    reach = (
        f"<p>Reach {band.reach_low_mm:.0f} to {band.reach_high_mm:.0f} mm, scatter "
        f"{100 * (band.reach_scatter or 0.0):.1f} %.</p>"
        if band.has_reach
        else "<p>The band holds no reach.</p>"
    )
    doubt = " by a clock that was not synchronised" if band.clock_synced is False else ""
    text = f"""<!DOCTYPE html>
<html lang="en"><head><meta charset="utf-8"><title>{html.escape(band.grade)}: what was taught</title>
<style>body{{font-family:sans-serif;max-width:60em;margin:2em auto}}table{{border-collapse:collapse}}
td,th{{padding:.2em .7em;border-bottom:1px solid #ccc;text-align:right}}</style></head><body>
<h1>{html.escape(band.grade)}</h1>
<p>{band.bars_used} reference bars, {band.bursts} bursts on {band.track_m:.1f} m of track, taught
{html.escape(band.taught)}{doubt}. The band is meant to hold {100 * band.content:g} % of bars, with a confidence of
{100 * band.confidence:g} %.</p>
<p>Burst-rate {band.burst_rate_low_per_m:.3f} to {band.burst_rate_high_per_m:.3f} per metre; scatter from bar to bar
{100 * band.rate_scatter:.1f} %, dispersion within a bar {band.rate_dispersion:.2f}.</p>{reach}
<p>Optics: {band.mm_per_px:g} mm per px, contact at {band.contact_px[0]:g}, {band.contact_px[1]:g} px, axis
{band.direction_deg:g} degrees, exposure {band.exposure_ms:g} ms, {band.fps:g} frames a second. Spark speed
{_number(band.spark_speed_m_s, 1)} m/s.</p>
<ul>{notes}</ul>
<img alt="reference bars and band" src="data:image/png;base64,{picture}">
<table><tr><th>bar</th><th>clip</th><th>begin (s)</th><th>bursts</th><th>track (m)</th><th>burst-rate (1/m)</th>
<th>reach (mm)</th><th>spark speed (m/s)</th><th></th></tr>{rows}</table></body></html>
"""
    _save(path, text.encode("utf-8"))


def _number(value: float, digits: int = 0) -> str:
    return f"{value:.{digits}f}" if math.isfinite(value) else "-"


def _draw_bars(panel: Any, band: Band, name: str, low: float, high: float) -> None:
    """Each bar's figure with two sampling deviations, over the band."""
    panel.axhspan(low, high, color="0.9")
    for bar in band.bars:
        if name.startswith("burst"):
            value = bar.bursts / bar.exposure_m if bar.exposure_m > 0.0 else math.nan
            error = 2.0 * math.sqrt(band.rate_dispersion * max(bar.bursts, 1)) / max(bar.exposure_m, 1e-9)
        else:
            value = bar.reach_mm
            noise = band.reach_noise_mm2_m or 0.0
            error = 2.0 * math.sqrt(noise / max(bar.reach_track_m, 1e-9)) if math.isfinite(noise) else 0.0
        if math.isfinite(value):
            style = {"color": "0.6", "marker": "x"} if bar.left_out else {"color": "tab:orange", "marker": "o"}
            panel.errorbar([bar.number], [value], yerr=[error], **style)
    panel.set_xlabel("reference bar")
    panel.set_ylabel(name)


def draw_contrast(path: Path, grades: Sequence[str], pairs: Sequence[Pair]) -> None:
    """The table as a picture: seconds of contact by expected and actual grade; pairs not told apart stay dark."""
    seconds = {(pair.expected, pair.actual): pair.seconds for pair in pairs}
    figure = _figure(1.5 + 1.1 * len(grades), 1.2 + 0.8 * len(grades))
    panel = figure.subplots()
    shown = [
        [
            math.log10(max(seconds[row, column], 1e-2)) if math.isfinite(seconds.get((row, column), math.inf)) else 3.0
            for column in grades
        ]
        for row in grades
    ]
    panel.imshow(shown, cmap="cividis_r", vmin=-2.0, vmax=3.0)
    for y, row in enumerate(grades):
        for x, column in enumerate(grades):
            value = seconds.get((row, column))
            text = "" if value is None else f"{value:.2f} s" if math.isfinite(value) else "never"
            panel.text(x, y, text, ha="center", va="center", color="white" if shown[y][x] > 0.5 else "black")
    panel.set_xticks(range(len(grades)), grades)
    panel.set_yticks(range(len(grades)), grades)
    panel.set_xlabel("on the wheel")
    panel.set_ylabel("expected")
    panel.set_title("contact time until told apart")
    _save(path, _png(figure))
