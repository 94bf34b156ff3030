"""Calibration of probe, burette and titrant, and the blank: what their readings say, with uncertainty and verdict."""
