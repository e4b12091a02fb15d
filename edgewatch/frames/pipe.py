"""Pipes: raw frames from stdin or a FIFO, so that any grabber program can feed the station.

A pipe carries nothing but pixels: size and layout come from the configuration, time is ``index / optics.fps``.
"""

from __future__ import annotations

import os
import stat

from edgewatch.errors import DeviceError, StalledError
from edgewatch.frames.blocks import Blocks
from edgewatch.frames.values import Frame, Source, SourceInfo
from edgewatch.settings import Settings


def open_pipe(rest: str, settings: Settings, live: bool = True) -> Source:
    """Open stdin (``-``), a FIFO, or a file of raw frames; does not wait for a writer.

    ``live``: the writer cannot wait (a camera's grabber), so the newest frame should win; otherwise it waits for us
    and nothing is skipped. A plain file is never live. Raises ``DeviceError``.
    """
    source, optics = settings.source, settings.optics
    name = "stdin" if rest == "-" else rest
    fd = _open(rest)
    mode = os.fstat(fd).st_mode
    if stat.S_ISDIR(mode) or os.isatty(fd):
        os.close(fd)
        kind = "a folder" if stat.S_ISDIR(mode) else "a terminal"
        raise DeviceError(f"pipe {name}: is {kind}; feed it raw {source.pixel_format} frames")
    info = SourceInfo(
        uri=f"pipe:{rest}",
        width_px=source.width_px,
        height_px=source.height_px,
        fps=optics.fps,
        live=live and not stat.S_ISREG(mode),
    )
    return RawPipe(
        fd, info, pixel_format=source.pixel_format, reopens=info.live and stat.S_ISFIFO(mode) and rest != "-"
    )


def _open(rest: str) -> int:
    try:
        if rest == "-":
            return os.dup(0)  # ours to close; stdin itself stays
        return os.open(rest, os.O_RDONLY | os.O_NONBLOCK | os.O_CLOEXEC)
    except (OSError, ValueError) as error:
        what = getattr(error, "strerror", None) or str(error)
        raise DeviceError(f"pipe {rest}: cannot be opened: {what}; make it with 'mkfifo'") from error


def frame_bytes(width_px: int, height_px: int, pixel_format: str) -> int:
    """Bytes of one raw frame: ``gray8`` or ``yuv420p`` (chroma planes halved and rounded up, as FFmpeg lays them)."""
    luminance = width_px * height_px
    if pixel_format == "gray8":
        return luminance
    if pixel_format == "yuv420p":
        return luminance + 2 * ((width_px + 1) // 2) * ((height_px + 1) // 2)
    raise ValueError(f"pixel_format = {pixel_format!r}: gray8 or yuv420p")


class RawPipe:
    """Raw frames from a file descriptor, which it takes over. See ``Source``."""

    def __init__(self, fd: int, info: SourceInfo, *, pixel_format: str = "gray8", reopens: bool = False) -> None:
        """``reopens``: when the writer goes, the source is lost and can be opened anew, rather than at its end."""
        self._info = info
        self._reopens = reopens
        self._blocks = Blocks(fd, frame_bytes(info.width_px, info.height_px, pixel_format))
        self._index = 0

    @property
    def info(self) -> SourceInfo:
        """What was opened."""
        return self._info

    def read(self, timeout_s: float) -> Frame | None:
        """Return the next frame, ``None`` when the writer is done after a whole frame, or after ``close``.

        Raises ``StalledError`` if the frame is not complete within ``timeout_s`` (what came is kept for the next call)
        and ``DeviceError`` if the data end within a frame, or the writer of a live FIFO goes.
        """
        info, blocks = self._info, self._blocks
        try:
            block = blocks.read(timeout_s)
        except TimeoutError:
            raise StalledError(
                f"{info.uri}: no whole frame within {timeout_s:g} s ({blocks.filled} of {blocks.size} bytes have come)"
            ) from None
        except EOFError as error:
            raise DeviceError(
                f"{info.uri}: ended within frame {self._index}, after {error}: cut short, or source.width_px x "
                f"source.height_px = {info.width_px} x {info.height_px} px is not what is written"
            ) from error
        except OSError as error:
            raise DeviceError(f"{info.uri}: cannot be read: {error.strerror or error}") from error
        if block is None:
            if self._reopens and not blocks.closed:
                raise DeviceError(f"{info.uri}: its writer has gone")
            return None
        picture = block[: info.width_px * info.height_px].reshape(info.height_px, info.width_px)
        frame = Frame(picture=picture, index=self._index, t_s=self._index / info.fps)
        self._index += 1
        return frame

    def close(self) -> None:
        """Wake a waiting reader and let go of the descriptor."""
        self._blocks.close()
