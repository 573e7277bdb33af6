"""The declared order of steps, for one survey or many."""
