"""A focus has one number in all recordings of its patient, from before a therapy to after it."""

from pathlib import Path

import polars as pl
import pytest

from flows import demo, nightly
from flows.change.patient_families import patient_families
from warehouse.published import Published


@pytest.fixture(scope="module")
def published(tmp_path_factory: pytest.TempPathFactory) -> Published:
    """The demo's patient with an early recurrence after ablation, one day per wear, published."""
    folder = tmp_path_factory.mktemp("coast") / "coast"
    (recurring,) = (patient for patient in demo.story() if patient.code == "LT-202")
    short = recurring._replace(wears=tuple(wear._replace(days=1) for wear in recurring.wears))
    with pytest.MonkeyPatch.context() as patched:
        patched.setattr(demo, "story", lambda: (short,))
        demo.make_programme(folder)
    nightly.run(Path(folder))
    return Published(folder / "published")


def test_the_focus_before_is_the_focus_after(published: Published) -> None:
    """The largest ventricular family of all three wears has one number, and normal beats another."""
    rows = published.table("patient_families").sort("recording_id", "beat_count", descending=[False, True])
    largest = rows.group_by("recording_id", "family_class", maintain_order=True).first()
    of_class = {name: largest.filter(pl.col("family_class") == name)["patient_family"].to_list() for name in "NV"}
    assert [len(numbers) for numbers in of_class.values()] == [3, 3]
    assert len(set(of_class["V"])) == len(set(of_class["N"])) == 1
    assert of_class["V"][0] != of_class["N"][0]
    assert rows["likeness"].min() > 0.9


def test_every_counted_beat_has_a_family_and_a_day(published: Published) -> None:
    """The family beats of a day are the analysable beats of that wear day."""
    of_families = published.frame("SELECT local_day, sum(beat_count) AS n FROM family_days GROUP BY ALL ORDER BY ALL")
    of_days = published.frame("SELECT local_day, all_beats AS n FROM wear_days WHERE all_beats > 0 ORDER BY ALL")
    assert of_families["n"].to_list() == of_days["n"].to_list()


def test_no_families_make_no_rows() -> None:
    """A programme without recordings has an empty table with its columns."""
    shapes = pl.DataFrame(
        schema={"recording_id": pl.String, "patient_code": pl.String, "start_utc": pl.Datetime("us"),
                "family": pl.Int16, "family_class": pl.String, "beat_count": pl.Int64,
                "shape_mv": pl.List(pl.Float32)}
    )  # fmt: skip
    assert patient_families(shapes).is_empty()
