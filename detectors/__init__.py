"""Arrays in, arrays out: beats, families, episodes, quality, change statistics. No files, no clock, no settings object."""
