"""The contact input: a control line of a serial port that says whether a bar is at the wheel."""

from __future__ import annotations

import threading
from collections.abc import Callable

from edgewatch.relay.serialport import SLICE_S, SerialPort
from edgewatch.settings import ContactSettings

_EQUAL_READINGS = 2
"""A switch bounces for some milliseconds: a level counts when it was read this often in a row."""


class ContactInput:
    """Reads the line fifty times a second and tells each change. RTS and DTR are raised: they feed the switch."""

    def __init__(self, settings: ContactSettings, told: Callable[[bool], None]) -> None:
        """``told`` is called from the thread of ``run`` with the first level and with every change."""
        self._settings, self._told = settings, told

    def run(self, stop: threading.Event) -> None:
        """Watch until ``stop`` is set; the work of one supervised thread. Raises ``SettingsError``, ``DeviceError``."""
        port = SerialPort(self._settings.port, part="contact", raised=True)
        try:
            known: bool | None = None
            last, equal = False, 0
            while not stop.wait(SLICE_S):
                closed = port.sensed(self._settings.line)
                equal = equal + 1 if closed == last else 1
                last = closed
                if equal >= _EQUAL_READINGS and closed != known:
                    known = closed
                    self._told(closed)
        finally:
            port.close()
