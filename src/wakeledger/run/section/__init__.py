"""A line traverse behind a two-dimensional model: the same shape of run as a plane, with a chain of its own."""
