"""Composition: command line, settings, register, inbox, ingest, nightly flow. The only room that knows Prefect."""
