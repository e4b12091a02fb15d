"""``edgewatch scale``: optics from a checkerboard picture or from two marked points."""

from __future__ import annotations

import argparse
import json
import math
import sys
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from edgewatch.commands.options import add_station, load_settings
from edgewatch.errors import DeviceError, SettingsError
from edgewatch.frames.clip import PICTURE_SUFFIXES, read_picture
from edgewatch.frames.registry import open_source
from edgewatch.settings import Settings
from edgewatch.sight.scale import Scale, find_corners, scale_of_board, scale_of_points
from edgewatch.wire.messages import plain

EXAMPLE = """\
edgewatch scale board.png --board 9x6 --square-mm 10
  edgewatch scale camera:/dev/video0 --board 9x6 --square-mm 10 --contact 40,200 --towards 610,260
  edgewatch scale --points 102.5,88 517,91.5 --distance-mm 200"""

MOST_AVERAGED = 16
"""Pictures of a source that are averaged: four times less noise, and no wait worth speaking of."""
FIRST_PICTURE_S = 10.0
"""Longest wait for a live source's picture (s)."""


def declare(parser: argparse.ArgumentParser) -> None:
    """Options of ``scale``."""
    parser.add_argument(
        "picture", nargs="?", metavar="PICTURE", help="picture file, or any source: clip, camera:DEV, stream:URL, …"
    )
    add_station(parser)
    board = parser.add_argument_group("a checkerboard, held in the plane of the stream, square to the camera")
    board.add_argument("--board", metavar="CxR", help="inner corners across and down, such as 9x6 for 10 x 7 squares")
    board.add_argument("--square-mm", type=float, metavar="F", help="side of one square, measured on the print")
    board.add_argument(
        "--board-error",
        type=float,
        default=0.3,
        metavar="PERCENT",
        help="largest error of the print (default: 0.3, an ordinary printer)",
    )
    points = parser.add_argument_group("two marked points a known distance apart")
    points.add_argument("--points", nargs=2, metavar="X,Y", help="the two points in px")
    points.add_argument("--distance-mm", type=float, metavar="F", help="their distance")
    points.add_argument("--point-error-px", type=float, default=0.5, metavar="F", help="marking error (default: 0.5)")
    axis = parser.add_argument_group("the stream, where it is known")
    axis.add_argument("--contact", metavar="X,Y", help="contact point in px")
    axis.add_argument("--towards", metavar="X,Y", help="a second point on the stream's axis, away from the wheel")
    parser.add_argument("--json", action="store_true", help="one JSON object")


def run(args: argparse.Namespace) -> int:
    """Print the scale and the lines for the station file; 1 when no board is found."""
    if (args.board is None) == (args.points is None):
        raise SettingsError("scale: give either --board with --square-mm, or --points with --distance-mm")
    axis = _axis(args)
    try:
        found = _from_points(args) if args.points is not None else _from_board(args)
    except ValueError as error:
        raise SettingsError(f"scale: {error}") from error
    if found is None:
        print(
            f"edgewatch: no board of {args.board} inner corners is found: all of it must be seen, evenly lit, with a "
            "white margin",
            file=sys.stderr,
        )
        return 1
    if args.json:
        print(json.dumps(plain({**axis, **_as_json(found)}), allow_nan=False))
    else:
        _print(found, axis)
    return 0


def _from_board(args: argparse.Namespace) -> Scale | None:
    try:
        columns, rows = (int(part) for part in args.board.lower().split("x"))
    except ValueError:
        raise SettingsError(f"--board {args.board}: inner corners across and down are needed, such as 9x6") from None
    if args.square_mm is None:
        raise SettingsError("--square-mm: needed with --board")
    if not args.picture:
        raise SettingsError("scale: a picture of the board is needed, or a source such as camera:/dev/video0")
    corners = find_corners(_picture(args), columns, rows)
    if corners is None:
        return None
    return scale_of_board(corners, columns, rows, square_mm=args.square_mm, board_error=args.board_error / 100.0)


def _from_points(args: argparse.Namespace) -> Scale:
    if args.distance_mm is None:
        raise SettingsError("--distance-mm: needed with --points")
    one, two = (_pair("--points", text) for text in args.points)
    return scale_of_points(one, two, distance_mm=args.distance_mm, point_error_px=args.point_error_px)


def _axis(args: argparse.Namespace) -> dict[str, object]:
    """Contact point and direction, as far as they are given."""
    if args.contact is None:
        if args.towards is not None:
            raise SettingsError("--contact: needed with --towards")
        return {}
    x, y = _pair("--contact", args.contact)
    if args.towards is None:
        return {"contact_px": [x, y]}
    to_x, to_y = _pair("--towards", args.towards)
    if (to_x, to_y) == (x, y):
        raise SettingsError(f"--towards {args.towards}: another point than the contact point is needed")
    direction = math.degrees(math.atan2(to_y - y, to_x - x))
    return {"contact_px": [x, y], "direction_deg": round(direction, 2)}


def _pair(option: str, text: str) -> tuple[float, float]:
    try:
        x, y = (float(part) for part in text.split(","))
    except ValueError:
        x = y = math.nan
    if not (math.isfinite(x) and math.isfinite(y)):
        raise SettingsError(f"{option} {text}: two numbers X,Y in px are needed, such as 40,200")
    return x, y


def _picture(args: argparse.Namespace) -> NDArray[np.uint8]:
    """The picture file, or the average of a source's first pictures."""
    path = Path(args.picture)
    if path.suffix.lower() in PICTURE_SUFFIXES and not path.is_dir():
        return read_picture(path)
    settings: Settings = load_settings(args)[0]
    source = open_source(args.picture, settings)
    pictures: list[NDArray[np.uint8]] = []
    try:
        while len(pictures) < MOST_AVERAGED and (frame := source.read(FIRST_PICTURE_S)) is not None:
            pictures.append(frame.picture)
    finally:
        source.close()
    if not pictures:
        raise DeviceError(f"{args.picture}: delivers no picture")
    return np.asarray(np.rint(np.mean(pictures, axis=0)), np.uint8)


def _as_json(found: Scale) -> dict[str, object]:
    return {
        "mm_per_px": found.mm_per_px,
        "plus_minus_mm_per_px": found.plus_minus,
        "rms_px": found.rms_px,
        "scale_change": found.change,
        "corners": found.corners,
        "remarks": list(found.remarks),
    }


def _print(found: Scale, axis: dict[str, object]) -> None:
    digits = max(1, 2 - math.floor(math.log10(found.plus_minus))) if found.plus_minus > 0 else 6
    percent = 100.0 * found.plus_minus / found.mm_per_px
    print("[optics]")
    print(f"mm_per_px = {found.mm_per_px:.{digits}f}  # ± {found.plus_minus:.{digits}f} ({percent:.2f} %, 95 %)")
    for key, value in axis.items():
        print(f"{key} = {value}")
    if math.isfinite(found.rms_px):
        print(
            f"# {found.corners} corners fit to {found.rms_px:.2f} px; the scale changes by {100 * found.change:.1f} % "
            "over the board"
        )
    for remark in found.remarks:
        print(f"edgewatch: {remark}", file=sys.stderr)
