"""The detector against expert labels, over a folder of records."""
