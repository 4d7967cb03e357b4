"""The heat register: plans, what became of them, and parameter sets, kept safely."""
