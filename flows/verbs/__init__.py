"""The verbs of the command, one module per thing they work on; heavy imports stand inside the verbs."""
