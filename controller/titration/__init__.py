"""The decision core: a run is a pure function of its plan and what was observed."""
