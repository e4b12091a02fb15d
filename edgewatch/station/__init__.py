"""Wiring: one supervised thread a port, clock, watchdog, stop."""
