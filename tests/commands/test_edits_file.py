"""An edits file changes what it says, is answered line by line, and changes nothing where it says nothing."""

import csv
import json
from collections.abc import Callable

from conftest import DrawnStudy, contents

FOOT_OF_BRANCH = (60, 66)  # (x, y) on the branch of the first picture
HEADER = "x_px,y_px,edit,value\n"


def test_edits_are_applied_or_left_out_by_name(make_study: Callable[..., DrawnStudy]) -> None:
    study = make_study(1)
    (image_id,) = study.ids
    assert study.measure(study.folder / "plain").status == 0
    study.sheet({image_id: f"{image_id}.png,edits.csv"}, "image_id,file,edits_file")

    (study.folder / "edits.csv").write_text(HEADER)
    assert study.measure(study.folder / "empty").status == 0
    assert contents(study.folder / "empty") == contents(study.folder / "plain")  # not a byte

    x, y = FOOT_OF_BRANCH
    rows = [
        f"{x},{y},drop,",
        "5,5,keep,",
        "5000,-300,drop,",
        f"{x},{y},class,venule",
        "20,48,crossing,",
        "20,48,branching,",
    ]
    (study.folder / "edits.csv").write_text(HEADER + "\n".join(rows) + "\n")
    assert study.measure(study.folder / "edited").status == 0
    folder = study.folder / "edited" / "images" / image_id
    notes = [note for note in json.loads((folder / "record.json").read_text())["notes"] if note.startswith("edit ")]
    told = [("applied" if note.endswith("applied") else "left out") for note in notes]
    assert told == ["applied", "left out", "left out", "applied", "left out", "left out"]
    assert "(5000, -300)" in notes[2]
    assert "px away, over 10; left out" in notes[2]
    assert "no place within 10 px where four vessel arms meet" in notes[4]
    with (folder / "image.csv").open(encoding="utf-8", newline="") as stream:
        image = next(csv.DictReader(stream))
    assert image["n_segments"] == "1"  # the branch is gone, and the stem it stood on is one vessel again
    assert "edit_missed" in image["flags"].split(";")
