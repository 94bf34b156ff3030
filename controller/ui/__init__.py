"""The terminal UI: every screen is a viewer of records; none owns a port or decides."""
