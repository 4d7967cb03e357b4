"""What everything stands on: units, errors, tolerances, elements, derivatives."""
