"""File formats, one module each. A reader knows bytes and nothing of patients, wears or the warehouse."""
