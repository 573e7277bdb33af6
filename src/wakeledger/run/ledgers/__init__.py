"""What is made of finished ledgers: increments, means of repeats, series of grids."""
