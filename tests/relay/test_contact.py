"""The contact input over a real socket port whose lines the test moves."""

from __future__ import annotations

import queue
import threading

import pytest

from edgewatch.errors import DeviceError, SettingsError
from edgewatch.relay.contact import ContactInput
from edgewatch.settings import ContactSettings
from tests.relay.boards import LineServer


@pytest.mark.filterwarnings("ignore:set(Daemon|Name):DeprecationWarning")  # pyserial 3.5's own
def test_changes_are_told_once_each() -> None:
    """The first level and every change are told; RTS, which feeds the switch, is raised and let go at the end."""
    server = LineServer()
    told: queue.Queue[bool] = queue.Queue()
    stop = threading.Event()
    source = ContactInput(ContactSettings(port=server.url, line="cts"), told.put)
    thread = threading.Thread(target=source.run, args=(stop,))
    thread.start()
    heard = [told.get(timeout=10.0)]
    if not heard[0]:  # read before the server had raised RTS
        heard = [told.get(timeout=10.0)]
    for level in (False, True):
        server.serial.rts = level  # on the loop RTS is wired to CTS: this opens and closes the switch
        heard.append(told.get(timeout=10.0))
    stop.set()
    thread.join(10.0)
    assert heard == [True, False, True] and told.empty()
    server.close()


def test_port_that_is_not_there_or_has_no_lines() -> None:
    """A missing port is a ``DeviceError``, a URL of no kind the operator's mistake."""
    stop = threading.Event()
    with pytest.raises(DeviceError, match="contact /dev/nowhere: cannot be opened"):
        ContactInput(ContactSettings(port="/dev/nowhere"), lambda closed: None).run(stop)
    with pytest.raises(SettingsError, match=r"contact\.port = 'foo://bar'"):
        ContactInput(ContactSettings(port="foo://bar"), lambda closed: None).run(stop)
