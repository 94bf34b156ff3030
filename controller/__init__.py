"""The titration: decisions, runner, journal, guard, evaluation, command line."""
