"""How sure a plan is, and what the heat log teaches: spread, tuning, drift, proof."""
