"""Edgewatch: an edge monitor for inline grinding inspection.

The core (sight, figures, judge, monitor, rehearsal, wire, settings) takes arrays, times and settings and returns
values; it opens nothing and reads no clock. The rim (frames, record, link, relay, station, commands) owns cameras,
sockets, files, ports and clocks, and decides nothing.
"""

__version__ = "0.1.0"
