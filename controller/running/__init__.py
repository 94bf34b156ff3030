"""A run while it goes on: actions carried out, stopped, watched and told about."""
