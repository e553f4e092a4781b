"""From the inbox to landed recordings: look, stage, open, place in time, find the wear, join, land, decline."""
