"""Multi-hole probes: their calibration, and from hole pressures to the flow state."""
