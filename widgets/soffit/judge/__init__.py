"""What the estimates mean: joint tests, the Sharpe ceiling, alphas under it, many alphas at once."""
