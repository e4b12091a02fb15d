"""The errors that Edgewatch raises on purpose.

::

    EdgewatchError
    ├── SettingsError   the operator's mistakes: configuration, band files, options        exit status 2
    └── DeviceError     the world's failures: camera, clip, broker, relay, disk            exit status 3
        └── StalledError    a source that should deliver pictures has delivered none in time

A wrong argument from our own code is ``ValueError``. Anything else that leaves the core is a bug.
"""


class EdgewatchError(Exception):
    """Base of the two families below; its text is one line fit for an operator."""


class SettingsError(EdgewatchError):
    """What the operator wrote cannot be used. Each problem names file, key, value and what is allowed."""

    def __init__(self, *problems: str) -> None:
        """Collect every problem found, so that all are mended in one go."""
        self.problems = problems
        super().__init__("; ".join(problems))


class DeviceError(EdgewatchError):
    """A device, file or server is missing or fails. The text names it and the remedy; the cause is chained."""


class StalledError(DeviceError):
    """A live source is open but has delivered no picture within the time asked for."""
