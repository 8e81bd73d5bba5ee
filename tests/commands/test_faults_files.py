"""Bad image files in a whole run: each costs its own image, with a reason in words, and changes no byte of another.

What must happen is the promise of the interface (one state an image, stable error codes, exit status 1); formats are
those of ISO/IEC 15948 (PNG) and TIFF revision 6.0, written by Pillow and tifffile.
"""

import os
import struct
import zlib
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

import numpy as np
import pytest
import tifffile
from conftest import DrawnStudy, contents, draw, failures, states
from PIL import Image

from vasohm.errors import ReadError, VasohmError
from vasohm.image.read import ReadSettings, read_image

MakeStudy = Callable[..., DrawnStudy]
NOBODY = 65534
SIDE_PX = 30_000  # 900 megapixels


def cut(path: Path, **how: object) -> None:
    """Write a whole picture, then leave only the first 60 % of its bytes."""
    Image.fromarray(draw(0)).save(path, **how)
    path.write_bytes(path.read_bytes()[: int(path.stat().st_size * 0.6)])


def bomb(path: Path) -> None:
    """Write a PNG of less than a kilobyte that declares a square of `SIDE_PX`."""
    header = struct.pack(">IIBBBBB", SIDE_PX, SIDE_PX, 8, 0, 0, 0, 0)
    chunks = ((b"IHDR", header), (b"IDAT", zlib.compress(bytes(10_000))), (b"IEND", b""))
    body = b"".join(struct.pack(">I", len(d)) + k + d + struct.pack(">I", zlib.crc32(k + d)) for k, d in chunks)
    path.write_bytes(b"\x89PNG\r\n\x1a\n" + body)


def mask_of(shape: tuple[int, int]) -> Callable[[Path], None]:
    return lambda path: Image.fromarray(np.full(shape, 255, np.uint8)).save(path)


def as_mode(mode: str) -> Callable[[Path], None]:
    return lambda path: Image.fromarray(np.stack([draw(0)] * 3, axis=-1)).convert(mode).save(path)


FAULTS: dict[str, tuple[str, Callable[[Path], object], str, str]] = {  # id: file, how it is made, error, words
    "missing": ("none.png", lambda _: None, "input_missing", "none.png: no such file"),
    "empty": ("empty.tif", lambda path: path.write_bytes(b""), "not_an_image", "empty (0 bytes)"),
    "text": ("text.tif", lambda path: path.write_text("radius,length\n"), "not_an_image", "looks like text"),
    "page": ("page.png", lambda path: path.write_text("<!DOCTYPE html>"), "not_an_image", "<!DOCTYPE html>"),
    "cut-png": ("cut.png", cut, "truncated", "copy it again"),
    "cut-jpeg": ("cut.jpg", lambda path: cut(path, quality=95), "truncated", "copy it again"),
    "cut-tiff": ("cut.tif", cut, "truncated", "copy it again"),
    "bomb": ("bomb.png", bomb, "too_large", "more than max_megapixels = 400"),
    "cmyk": ("cmyk.tif", as_mode("CMYK"), "unsupported_pixels", "SEPARATED"),
    "lab": ("lab.tif", as_mode("LAB"), "unsupported_pixels", "CIELAB"),
    "complex": (
        "complex.tif",
        lambda path: tifffile.imwrite(path, draw(0).astype(np.complex64)),
        "unsupported_pixels",
        "complex64",
    ),
    "pipe": ("pipe.tif", os.mkfifo, "not_an_image", "is a pipe"),
    "folder": ("folder.tif", Path.mkdir, "not_an_image", "is a folder"),
    "ring": ("ring.tif", lambda path: path.symlink_to(path), "unreadable", "symbolic links"),
}
MASKS: dict[str, tuple[str, Callable[[Path], object], str]] = {
    "small": ("small.png", mask_of((50, 50)), "is 50 x 50 px, but its image is 97 x 96 px"),
    "turned": ("turned.png", mask_of((97, 96)), "equals the rotated size"),
}


@pytest.mark.timeout(60)
@pytest.mark.usefixtures("one_process")
def test_every_bad_file_is_one_row_and_nothing_else(
    make_study: MakeStudy, tmp_path: Path, undisturbed: dict[str, str]
) -> None:
    """A study of bad files around a good one: the good one must not lose a byte, nor the run its count."""
    study, out = make_study(2), tmp_path / "out"
    rows = {"image-0": "image-0.png,"}
    for name, (file, make, _, _) in FAULTS.items():
        make(study.folder / file)
        rows[name] = f"{file},"
    for name, (file, make, _) in MASKS.items():
        make(study.folder / file)
        rows[name] = f"image-1.png,{file}"
    study.sheet(rows, "image_id,file,mask_file")
    ended = study.measure(out)
    assert ended.status == 1, ended.complained
    assert states(out) == {name: "measured" if name == "image-0" else "failed" for name in rows}
    n = len(FAULTS) + len(MASKS)
    assert ended.told.splitlines()[-1] == f"{n + 1} images: 1 measured, 0 empty, {n} failed; exit status 1"
    assert "not_an_image 5 (empty, text, page, pipe, folder)" in ended.told
    told = failures(out)
    for name, (_, _, error, words) in FAULTS.items():
        assert (told[name]["stage"], told[name]["error"]) == ("read", error), name
        assert words in told[name]["message"], name
    for name, (_, _, words) in MASKS.items():
        assert told[name]["error"] == "mask"
        assert words in told[name]["message"]
    assert sorted(path.name for path in (out / "images").iterdir()) == ["image-0"]
    good = {name: held for name, held in undisturbed.items() if name.startswith("images/image-0/")}
    assert {name: held for name, held in contents(out).items() if name.startswith("images/")} == good


@pytest.mark.usefixtures("one_process")
def test_a_picture_that_changes_while_it_is_measured_is_no_result(make_study: MakeStudy, tmp_path: Path) -> None:
    """The record would name bytes that were never measured."""
    study, out = make_study(1), tmp_path / "out"
    ended = study.measure(out, DEEDS="96:rewrite", MARK=str(study.folder / "image-0.png"))
    assert ended.status == 1
    assert "changed while it was being measured" in failures(out)["image-0"]["message"]
    assert not (out / "images" / "image-0").exists()
    assert study.measure(out).status == 0  # at rest, the same command carries on


@pytest.mark.skipif(os.geteuid() != 0, reason="only root can become somebody who may not read")
def test_a_file_that_may_not_be_read_is_told(tmp_path: Path) -> None:
    path = tmp_path / "closed.png"
    Image.fromarray(draw(0)).save(path)
    path.chmod(0)
    with as_nobody(tmp_path), pytest.raises(ReadError, match=r"closed\.png: cannot be read: Permission denied"):
        read_image(path, ReadSettings("max", 400.0, "green"))


@contextmanager
def as_nobody(folder: Path) -> Iterator[None]:
    """Act as a user without rights; folders on the way are opened for passing through."""
    for place in (folder, *folder.parents[:-2]):
        place.chmod(place.stat().st_mode | 0o011)
    os.seteuid(NOBODY)
    try:
        yield
    finally:
        os.seteuid(0)


ODD_NAMES = (
    "a\nb.png",
    "\u202egnp.a.png",
    "q\"uo,te'.png",
    "=cmd.png",
    "<img src=x onerror=alert(1)>.png",
    "n" * 251 + ".png",
    "\x1b[31m.png",
)


@pytest.mark.usefixtures("one_process")
def test_odd_file_names_work_and_are_shown_escaped(make_study: MakeStudy, tmp_path: Path) -> None:
    """A line feed or an escape of a terminal in a name would forge lines of the log."""
    study, out = make_study(1), tmp_path / "out"
    names = [*ODD_NAMES, os.fsdecode(b"\xff\xfe.png")]
    for name in names:
        (study.folder / name).write_bytes(b"no picture")
    ended = study.run("measure", *names, "--pixel-size", "2.0", "--out", out)
    assert ended.status == 1
    assert len(failures(out)) == len(names)
    assert all(line.isprintable() for line in (ended.told + ended.complained).splitlines())
    log = (out / "run" / "log.txt").read_text(encoding="utf-8")
    assert all(line.isprintable() for line in log.splitlines())
    assert len(log.splitlines()) == len(names) + 2  # and the first and last line of the run
    (study.folder / ODD_NAMES[0]).write_bytes((study.folder / "image-0.png").read_bytes())
    assert study.run("measure", ODD_NAMES[0], "--pixel-size", "2.0", "--out", tmp_path / "one").status == 0


@pytest.mark.parametrize("kind", ["png", "jpg", "tif", "bmp"])
def test_a_picture_is_never_taken_from_half_a_file(kind: str, tmp_path: Path) -> None:
    """Cut at any of forty places: refused by name, since a partly grey picture would still give numbers."""
    path = tmp_path / f"cut.{kind}"
    Image.fromarray(draw(0)).save(path)
    whole = path.read_bytes()
    for share in np.linspace(0.0, 0.99, 40):
        path.write_bytes(whole[: int(share * len(whole))])
        with pytest.raises(VasohmError, match=r"cut\."):
            read_image(path, ReadSettings("max", 400.0, "green"))
