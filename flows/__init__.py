"""Composition: command line, settings, register, inbox, ingest, nightly flow. The only room that knows Prefect."""

import zoneinfo

# Local days follow the pinned tzdata package on every host, not the host's own copy of the time zone database.
zoneinfo.reset_tzpath(to=())
