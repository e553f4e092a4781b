"""Composition: command line, settings, register, inbox, ingest, nightly flow. The only room that knows Prefect."""

import os
import zoneinfo

# Local days follow the pinned tzdata package on every host, not the host's own copy of the time zone database.
zoneinfo.reset_tzpath(to=())

# Our matrix products are small: threads that numpy wakes for each of them cost more than they save, and twice as much
# where several recordings are analysed side by side. Read when numpy is imported.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
