"""Laws of the end of the blow: one published relation, one short function, data in tables."""
