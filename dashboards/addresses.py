"""Where each page and data file of the site lies, relative to the site's folder."""

from __future__ import annotations

import hashlib
import re


def stem(code: str) -> str:
    """Return a file name for any code: the code itself when plain capitals and digits, else shortened with a hash.

    Codes that differ only in case never share a name, so the site survives a file system that ignores case.
    """
    if re.fullmatch(r"[A-Z0-9](?:[A-Z0-9_-]{0,62}[A-Z0-9])?", code):
        return code
    kept = re.sub(r"[^a-z0-9]+", "-", code.lower()).strip("-")[:40]
    return f"{kept or 'code'}-{hashlib.sha256(code.encode()).hexdigest()[:10]}"


def patient_page(patient_code: str) -> str:
    return f"patients/{stem(patient_code)}.html"


def recording_page(recording_id: str) -> str:
    return f"recordings/{stem(recording_id)}.html"


def review_page(recording_id: str) -> str:
    return f"review/{stem(recording_id)}.html"


def data_file(page: str, name: str) -> str:
    """Return the CSV file that lies beside a page, such as data/patients/P-01/days.csv."""
    return f"data/{page.removesuffix('.html')}/{name}.csv"
