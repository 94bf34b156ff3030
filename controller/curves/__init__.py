"""Curves from tables and records, evaluated for the command line."""
