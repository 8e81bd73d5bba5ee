"""The image sheet, terminals and edits: every problem told with its line, and nothing guessed or shifted.

How spreadsheets and table libraries go wrong here is common practice, without a source, but for RFC 4180 (quoting).
"""

import math
import re
from collections.abc import Callable
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from vasohm.config.csv_table import CellError, Range, parse_number
from vasohm.config.names import is_one_edit_away
from vasohm.config.sheet import KNOWN, ImageSource, Sheet, read_edits, read_sheet, read_terminals
from vasohm.errors import RequestError
from vasohm.flow.terminals import TerminalPoint
from vasohm.image.calibrate import TypedScale
from vasohm.image.disc import OpticDisc
from vasohm.image.eye import Eye
from vasohm.network.edits import Edit
from vasohm.results.schema import column_names


def sheet_of(folder: Path, text: str | bytes, covariates: tuple[str, ...] = ()) -> Sheet:
    (folder / "images.csv").write_bytes(text.encode() if isinstance(text, str) else text)
    return read_sheet(folder / "images.csv", covariates)


def problems(read: Callable[[], object]) -> list[str]:
    with pytest.raises(RequestError) as caught:
        read()
    return [str(problem) for problem in caught.value.problems]


def faults(folder: Path, text: str | bytes, covariates: tuple[str, ...] = ()) -> list[str]:
    return problems(lambda: sheet_of(folder, text, covariates))


def test_every_column_becomes_what_it_means(tmp_path: Path) -> None:
    """A column read into the wrong field would be measured without a word."""
    (tmp_path / "ends.csv").write_text("x_px,y_px,role\n1,2,inlet\n")
    (tmp_path / "mine.csv").write_text("x_px,y_px,edit\n1,2,drop\n")
    text = (
        "image_id,file,pixel_size_um,pixel_size_se_um,mask_file,fov_file,class_file,terminals_file,edits_file,"
        "disc_x_px,disc_y_px,disc_radius_px,axial_length_mm,axial_length_se_mm,refraction_d,"
        "hematocrit,subject,eye,group,condition,time,age_years\n"
        "a-1,a.tif,7.0,0.1,m.png,f.png,c.png,ends.csv,mine.csv,10,20.5,3e1,24.1,0.05,-2.25,0.45,s1,left,NA,rest,0,61\n"
    )
    sheet = sheet_of(tmp_path, text)
    assert sheet.carried == ("age_years",)
    assert sheet.images == (
        ImageSource(
            image_id="a-1",
            file=tmp_path / "a.tif",
            scale=TypedScale(7.0, 0.1, Eye(24.1, 0.05, -2.25)),
            mask_file=tmp_path / "m.png",
            fov_file=tmp_path / "f.png",
            class_file=tmp_path / "c.png",
            terminals=(TerminalPoint(1.0, 2.0, "inlet", None, None, None),),
            edits=(Edit(1.0, 2.0, "drop", ""),),
            disc=OpticDisc(10.0, 20.5, 30.0, "sheet", 1.0),
            hematocrit=0.45,
            design={"subject": "s1", "eye": "left", "group": "NA", "condition": "rest", "time": "0", "age_years": "61"},
        ),
    )


@pytest.mark.parametrize("word", ["NA", "None", "nan", "null", "N/A", "-", " "])
def test_only_the_empty_cell_is_missing(word: str, tmp_path: Path) -> None:
    """A group may be called NA: libraries that take it for missing lose a cohort."""
    sheet = sheet_of(tmp_path, f"image_id,file,group,score\na,a.tif,{word},\n")
    assert sheet.images[0].design == {"group": word, "score": ""}
    with pytest.raises(RequestError, match=r"hematocrit: .* is not a number"):
        sheet_of(tmp_path, f"image_id,file,hematocrit\na,a.tif,{word}\n")


@pytest.mark.parametrize("end", ["\n", "\r\n", "\r"])
@pytest.mark.parametrize("mark", ["", "\ufeff"])
def test_line_ends_and_byte_order_mark(end: str, mark: str, tmp_path: Path) -> None:
    lines = ["image_id,file,note", 'a,a.tif,"one, two"', 'b,b.tif,"said ""no"""', "c,c.tif,é"]
    sheet = sheet_of(tmp_path, mark + end.join(lines) + end)
    assert [source.design["note"] for source in sheet.images] == ["one, two", 'said "no"', "é"]


HEAD = "image_id,file,group\n"
BROKEN = {
    "UTF-16": ((HEAD + "a,a.tif,x\n").encode("utf-16"), ":1: looks like UTF-16"),
    "UTF-16 without mark": ((HEAD + "a,a.tif,x\n").encode("utf-16-le"), ":1: holds a NUL byte"),
    "Latin-1": (
        (HEAD + "a,a.tif,x\nb,b.tif,é\n").encode("latin-1"),
        ":3: byte 0xe9 is not UTF-8: it looks like Latin",
    ),
    "NUL": (HEAD + "a,a.tif,x\nb,b\0.tif,y\n", ":3: holds a NUL byte"),
    "semicolons": ("image_id;file;pixel_size_um\na;a.tif;7,0\n", ":1: its columns are separated by semicolons"),
    "tabs": ("image_id\tfile\na\ta.tif\n", ":1: its columns are separated by tabs"),
    "trailing commas": (HEAD + "a,a.tif,x,\n", ":2: has 4 cells, but the header has 3. Remove the comma at its end."),
    "a short row": (HEAD + "a,a.tif\n", ":2: has 2 cells, but the header has 3."),
    "a long row": (HEAD + "a,a.tif,x,y,z\n", ":2: has 5 cells, but the header has 3. A cell with a comma"),
    "a blank line": (HEAD + "a,a.tif,x\n\nb,b.tif,y\n", ":3: is a blank line. Remove it."),
    "an open quote": (HEAD + 'a,a.tif,x\nb,"b.tif,y\nc,c.tif,z\n', ":3: cannot be split into cells: a quote"),
    "a column twice": ("image_id,file,group,group\na,a.tif,x,y\n", ":1 group: column 'group' occurs twice"),
    "a nameless column": ("image_id,file,\na,a.tif,x\n", ":1: column 3 has no name"),
    "spaces in a name": ("image_id, file\na,a.tif\n", ":1  file: column ' file' has spaces"),
    "no file column": ("image_id\na\n", ":1 file: the column file is missing"),
    "only a header": (HEAD, ": no images"),
    "nothing": ("", ": is empty"),
}


@pytest.mark.parametrize("name", BROKEN)
def test_broken_tables_name_the_line_and_what_it_looks_like(name: str, tmp_path: Path) -> None:
    """A table that is split wrongly shifts values into columns where they look right."""
    text, words = BROKEN[name]
    found = faults(tmp_path, text)
    assert any(problem.startswith("images.csv" + words) for problem in found), found


def test_all_problems_are_told_at_once(tmp_path: Path) -> None:
    """Who must mend one row after the other gives up."""
    text = (
        "image_id,file,pixel_size_um,hematocrit,disc_x_px,disc_y_px,disc_radius_px\n"
        '..,a.tif,"7,0",0.8,,,\n'
        "b,,7.0,0.4,,,\n"
        "b,/etc/passwd,-7,,1,2,\n"
        "c,c.tif,7.0\n"
    )
    found = faults(tmp_path, text)
    for words in (
        "images.csv:5: has 3 cells",
        "images.csv:2 image_id: '..' is no image_id",
        "images.csv:2 pixel_size_um: '7,0' is not a number. Is that a decimal comma? Write 7.0.",
        "images.csv:2 hematocrit: '0.8' must be at least 0 and at most 0.75.",
        "images.csv:3 file: is empty, but needed.",
        "images.csv:4 file: '/etc/passwd' is an absolute path",
        "images.csv:4 pixel_size_um: '-7' must be at least 0.001",
        "images.csv:4 disc_radius_px: is empty; an optic disc needs",
        "images.csv:4 image_id: 'b' occurs on line 3",
    ):
        assert any(problem.startswith(words) for problem in found), (words, found)
    assert len(found) == 9


# ---- numbers


@given(st.floats(min_value=0, allow_nan=False, allow_infinity=False, exclude_min=True))
def test_numbers_read_back_to_the_same_float(value: float) -> None:
    """A reader that rounds changes what was typed."""
    assert parse_number(repr(value), Range()) == value
    assert parse_number(f" {value!r} ", Range()) == value


@given(st.text(max_size=12))
def test_what_is_no_plain_decimal_number_is_refused(text: str) -> None:
    """Python takes `1_000`, `infinity` and digits of other scripts for numbers; a sheet does not mean them so."""
    is_plain = re.fullmatch(r" *[+-]?([0-9]+(\.[0-9]*)?|\.[0-9]+)([eE][+-]?[0-9]+)? *", text) is not None
    if is_plain and math.isfinite(float(text)):
        assert parse_number(text, Range()) == float(text)
    else:
        with pytest.raises(CellError, match=r"not a number|too large"):
            parse_number(text, Range())


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("7,0", "decimal comma"),
        ("7 µm", "without its unit"),
        ("7um", "without its unit"),
        ("inf", "is not a number"),
        ("nan", "is not a number"),
        ("1e400", "too large"),
        ("1_0", "is not a number"),
        ("٧", "is not a number"),
        ("0", "greater than 0"),
        ("-7", "greater than 0"),
        ("true", "is not a number"),
    ],
)
def test_faulty_numbers_say_what_they_look_like(text: str, words: str) -> None:
    with pytest.raises(CellError, match=words):
        parse_number(text, Range(least=0, is_open=True))


# ---- names of images

BAD_IDS = ["..", ".", ".x", "-x", "_x", "CON", "con.tif", "Lpt9", "a.", "a" * 101, "a\n", "é", "", "a/b", "a b", "a\\b"]


@pytest.mark.parametrize("image_id", BAD_IDS)
def test_ids_that_no_folder_may_have(image_id: str, tmp_path: Path) -> None:
    """An id becomes a folder: `..` would write outside, `CON` cannot be made everywhere."""
    (problem,) = faults(tmp_path, f'image_id,file\n"{image_id}",a.tif\n')
    assert problem.startswith("images.csv:2 image_id: ")


@pytest.mark.parametrize("image_id", ["0", "A", "a-b_c.d", "a" * 100, "NA", "nan", "1e5", "cone", "com10"])
def test_ids_stay_the_text_they_are(image_id: str, tmp_path: Path) -> None:
    assert sheet_of(tmp_path, f"image_id,file\n{image_id},a.tif\n").images[0].image_id == image_id


def test_ids_that_differ_only_in_case_are_one_folder_on_some_disks(tmp_path: Path) -> None:
    (problem,) = faults(tmp_path, "image_id,file\nEye1,a.tif\neye1,b.tif\n")
    assert problem.startswith("images.csv:3 image_id: 'eye1' differs only in case from 'Eye1' on line 2")


def test_ids_that_are_equal_as_numbers_are_told(tmp_path: Path) -> None:
    """A spreadsheet makes 7 of 007: somebody has probably lost zeros."""
    sheet = sheet_of(tmp_path, "image_id,file\n007,a.tif\n7,b.tif\n8,c.tif\n")
    assert [source.image_id for source in sheet.images] == ["007", "7", "8"]
    assert sheet.warnings == ("images.csv:3 image_id: '7' and '007' are equal as numbers.",)


# ---- columns

MISSPELT = {
    "pixel_size_mm": "pixel_size_um",
    "pixel_size": "pixel_size_um",
    "pixelsize_um": "pixel_size_um",
    "pixel_size_se_nm": "pixel_size_se_um",
    "axial_length_cm": "axial_length_mm",
    "hematocrit_percent": "hematocrit",
    "hematocirt": "hematocrit",
    "haematocrit": "hematocrit",
    "subjetc": "subject",
    "conditions": "condition",
    "mask_fle": "mask_file",
    "Group": "group",
    "SUBJECT": "subject",
}


@pytest.mark.parametrize("name", MISSPELT)
def test_misspelt_columns_are_not_carried_through(name: str, tmp_path: Path) -> None:
    """`pixel_size_mm` carried through as a remark leaves the image without a size, or with a wrong one."""
    (problem,) = faults(tmp_path, f"image_id,file,{name}\na,a.tif,1\n")
    assert f"column {name!r} looks like {MISSPELT[name]}" in problem
    assert sheet_of(tmp_path, f"image_id,file,{name}\na,a.tif,1\n", (name,)).carried == (name,)


@pytest.mark.parametrize("name", ["age_years", "grop", "tile", "site", "hematoma", "disc_area_um2", "weight_kg"])
def test_other_columns_are_carried_through(name: str, tmp_path: Path) -> None:
    """A short word is one letter away from too many honest ones."""
    assert sheet_of(tmp_path, f"image_id,file,{name}\na,a.tif,1\n").carried == (name,)


@pytest.mark.parametrize("name", sorted({*column_names("image"), "disc_source"} - set(KNOWN)))
def test_columns_named_as_results_are_refused(name: str, tmp_path: Path) -> None:
    """Two columns of one name: nobody could tell the typed value from the measured one."""
    found = faults(tmp_path, f"image_id,file,{name}\na,a.tif,1\n", (name,))
    assert any("has the name of an output column" in problem for problem in found)


letters = st.text("abc_", max_size=5)


@given(letters, letters)
def test_one_edit_away_as_counted_by_the_recurrence(a: str, b: str) -> None:
    """Against the textbook recurrence of the restricted edit distance with swaps (Damerau, CACM 1964;7:171)."""
    far = {(i, 0): i for i in range(len(a) + 1)} | {(0, j): j for j in range(len(b) + 1)}
    for i in range(1, len(a) + 1):
        for j in range(1, len(b) + 1):
            cost = int(a[i - 1] != b[j - 1])
            far[i, j] = min(far[i - 1, j] + 1, far[i, j - 1] + 1, far[i - 1, j - 1] + cost)
            if i > 1 and j > 1 and a[i - 1] == b[j - 2] and a[i - 2] == b[j - 1]:
                far[i, j] = min(far[i, j], far[i - 2, j - 2] + 1)
    assert is_one_edit_away(a, b) == (far[len(a), len(b)] == 1)


# ---- files


@pytest.mark.parametrize(
    ("name", "words"),
    [
        ("/etc/passwd", "absolute path"),
        ("../secret.tif", "leads out"),
        ("inside/../../secret.tif", "leads out"),
        ("link/secret.tif", "leads out"),
        ("linked.tif", "leads out"),
        ("file:///etc/passwd", "is a URL"),
        ("https://a.org/a.tif", "is a URL"),
        ("C:\\a.tif", "absolute path"),
        ("c:a.tif", "absolute path"),
        ("inside\\a.tif", "backslash"),
    ],
)
@pytest.mark.parametrize("column", ["file", "mask_file", "terminals_file"])
def test_files_stay_inside_the_folder_of_the_sheet(name: str, words: str, column: str, tmp_path: Path) -> None:
    """A sheet that somebody sends must not read other files of this machine."""
    base = tmp_path / "study"
    (base / "inside").mkdir(parents=True)
    (tmp_path / "secret.tif").write_text("secret")
    (base / "link").symlink_to(tmp_path)
    (base / "linked.tif").symlink_to(tmp_path / "secret.tif")
    header = "image_id,file" if column == "file" else f"image_id,file,{column}"
    row = f"a,{name}" if column == "file" else f"a,a.tif,{name}"
    (problem,) = faults(base, f"{header}\n{row}\n")
    assert problem.startswith(f"images.csv:2 {column}: ")
    assert words in problem


def test_images_and_masks_that_are_not_there_are_left_to_the_measurement(tmp_path: Path) -> None:
    """One missing file must cost one image, not the study."""
    (tmp_path / "ring").symlink_to(tmp_path / "ring")
    sheet = sheet_of(tmp_path, f"image_id,file,mask_file\na,no/a.tif,m.png\nb,ring,\nc,{'x' * 300},\n")
    assert [source.file.name for source in sheet.images] == ["a.tif", "ring", "x" * 300]


def test_terminals_that_are_not_there_stop_the_request(tmp_path: Path) -> None:
    """Without them the image would be measured as if nobody had said where blood enters."""
    (problem,) = faults(tmp_path, "image_id,file,terminals_file\na,a.tif,t.csv\n")
    assert problem.startswith("images.csv:2 terminals_file: t.csv: no such file")


def test_names_that_look_the_same_are_found_and_told(tmp_path: Path) -> None:
    """Accents come composed or not, after the system that wrote the name (Unicode standard annex 15)."""
    (tmp_path / "e\u0301.tif").write_text("")
    sheet = sheet_of(tmp_path, "image_id,file\na,\u00e9.tif\n")
    assert sheet.images[0].file.exists()
    assert "composed otherwise (NFD)" in sheet.warnings[0]


# ---- terminals and edits


def read_points(folder: Path, text: str) -> tuple[TerminalPoint, ...]:
    (folder / "t.csv").write_text(text)
    return read_terminals(folder / "t.csv")


def read_corrections(folder: Path, text: str) -> tuple[Edit, ...]:
    (folder / "e.csv").write_text(text)
    return read_edits(folder / "e.csv")


def test_terminals(tmp_path: Path) -> None:
    text = "role,x_px,y_px,pressure_mmhg,flow_nl_min,hematocrit\ninlet,1.5,-2,25,,0.4\noutlet,3,4,,12,\n"
    assert read_points(tmp_path, text) == (
        TerminalPoint(1.5, -2.0, "inlet", 25.0, None, 0.4),
        TerminalPoint(3.0, 4.0, "outlet", None, 12.0, None),
    )
    assert read_points(tmp_path, "x_px,y_px,role\n") == ()


def test_faulty_terminals(tmp_path: Path) -> None:
    """A role or place that is guessed turns the flow round."""
    text = "x_px,y_px,role,flow_nl_min,pressure_mmhg\n1,2,inlett,,\n1,2,outlet,-3,\n1,2,inlet,1,2\n,5,inlet,,\n"
    found = problems(lambda: read_points(tmp_path, text))
    for words in (
        "t.csv:2 role: 'inlett' is none of inlet, outlet. Did you mean inlet?",
        "t.csv:3 flow_nl_min: '-3' must be at least 0.",
        "t.csv:4 flow_nl_min: a terminal takes a pressure or a flow, not both.",
        "t.csv:4 x_px: the terminal of line 3 lies at the same place (1, 2).",
        "t.csv:5 x_px: is empty, but needed.",
    ):
        assert words in found
    assert len(found) == 5
    (unknown,) = problems(lambda: read_points(tmp_path, "x_px,y_px,role,presure_mmhg\n"))
    assert "column 'presure_mmhg' is not known. Did you mean pressure_mmhg?" in unknown
    assert "the column role is missing" in problems(lambda: read_points(tmp_path, "x_px,y_px\n1,2\n"))[0]


def test_edits(tmp_path: Path) -> None:
    text = "x_px,y_px,edit,value\n1,2,drop,\n3,4,class,venule\n5,6,crossing,\n"
    expected = (Edit(1, 2, "drop", ""), Edit(3, 4, "class", "venule"), Edit(5, 6, "crossing", ""))
    assert read_corrections(tmp_path, text) == expected
    found = problems(
        lambda: read_corrections(
            tmp_path, "x_px,y_px,edit,value\n1,2,delete,\n3,4,class,vein\n5,6,class,\n7,8,drop,x\n"
        )
    )
    for words in (
        "e.csv:2 edit: 'delete' is none of drop, keep, class, crossing, branching.",
        "e.csv:3 value: 'vein' is none of arteriole, venule, capillary.",
        "e.csv:4 value: is empty, but needed.",
        "e.csv:5 value: 'x': only the edit class takes a value.",
    ):
        assert any(problem.startswith(words) for problem in found), (words, found)
    assert len(found) == 4
