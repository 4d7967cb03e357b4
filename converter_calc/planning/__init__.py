"""What a user asks: plan, predict, limits, grades, explanations, sweeps."""
