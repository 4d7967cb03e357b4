"""The balance: inputs, charge, state, residuals, solver, streams."""
