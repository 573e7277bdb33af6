"""The undisturbed stream: gas, atmosphere, airspeed and the reference state, in SI."""
