"""Published tables in, static HTML out. No arithmetic that a published table does not hold."""
