"""Column dictionary, immutable parts, ledger, SQL models, checks and publication. Knows nothing of signals or pages."""
