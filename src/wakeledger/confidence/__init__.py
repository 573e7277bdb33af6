"""Error bars for any callable: sources, Monte Carlo, first-order propagation, noise and the budget."""
