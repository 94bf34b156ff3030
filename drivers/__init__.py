"""Real devices: clock, serial link, wire grammar, pump, probe, operator."""
