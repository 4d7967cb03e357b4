"""From the end of the blow to the ladle: grades, additions, what the tap changes."""
