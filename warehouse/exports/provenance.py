"""Where exported numbers come from: what every export carries beside its rows."""

from __future__ import annotations

from importlib.metadata import PackageNotFoundError, version
from typing import NamedTuple

from warehouse.cautions import CAUTIONS
from warehouse.published import Published


class Provenance(NamedTuple):
    """Program, publication or cut, and fingerprint behind an export, and the cautions that go with it."""

    program: str
    publication: str
    fingerprint: str
    cautions: tuple[str, ...]

    def lines(self) -> list[str]:
        """The same as lines of text."""
        named = zip(("program", "publication or data cut", "fingerprint"), self[:3], strict=True)
        return [*(f"{name}: {value}" for name, value in named), *self.cautions]


def provenance(published: Published) -> Provenance:
    """Provenance of everything that is exported from a publication."""
    return Provenance(_program(), published.name, published.manifest["fingerprint"], CAUTIONS)


def _program() -> str:
    try:
        return f"burdenline {version('burdenline')}"
    except PackageNotFoundError:
        return "burdenline"
