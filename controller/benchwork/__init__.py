"""Work at a bench: devices connected, checked, made ready, shut down; what calibrations work with."""
