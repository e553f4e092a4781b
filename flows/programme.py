"""The programme folder as a newcomer gets it."""

from __future__ import annotations

from pathlib import Path

from flows.settings import check_zone, template

REGISTER_HEADERS = {
    "patients.csv": "patient_code,zone",
    "wears.csv": "device_serial,patient_code,from_local,to_local,start_local",
    "therapies.csv": "therapy_id,patient_code,therapy_kind,therapy_detail,at_local",
}


def make_folder(folder: Path, name: str, zone: str) -> None:
    """Make programme.toml, empty register files, inbox and quarantine; refuses a folder that already has settings."""
    check_zone("--zone", zone)
    if (folder / "programme.toml").exists():
        raise FileExistsError(17, "is already a programme folder; its settings stay as they are", str(folder))
    for part in ("register", "inbox", "quarantine"):
        (folder / part).mkdir(parents=True, exist_ok=True)
    for file, header in REGISTER_HEADERS.items():
        (folder / "register" / file).write_text(header + "\n", encoding="utf-8")
    (folder / "programme.toml").write_text(template(name, zone), encoding="utf-8")
