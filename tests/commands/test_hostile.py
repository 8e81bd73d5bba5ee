"""Files made to break readers: refused by one of our names or read, without a crash, a hang or memory beyond a limit.

The pictures of `tests/corpora.py` were found by others' fuzzing; those made here cut, flip and lengthen the bytes of
sound files (PNG: ISO/IEC 15948, JPEG: ITU-T T.81, TIFF revision 6.0, DICOM PS3.5).
"""

import base64
import contextlib
import io
import json
import queue
import subprocess
import sys
import threading
import warnings
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
import tifffile
from conftest import DrawnStudy, draw, failures, states
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from PIL import Image

from vasohm.errors import ScaleError, TooLargeError, UnsupportedPixelsError, VasohmError
from vasohm.flags import Flag
from vasohm.image.calibrate import TypedScale, calibrate
from vasohm.image.read import RawImage, ReadSettings, read_image

pydicom = pytest.importorskip("pydicom")

MakeStudy = Callable[..., DrawnStudy]
CORPORA = Path(sys.prefix) / "share" / "hostile-pictures"
SETTINGS = ReadSettings("max", 400.0, "luminance")
GREY = draw(0)[:48, :40]
FILE_S = 20.0  # for one file on a busy machine; most take milliseconds
LIMIT_BYTES = 2 << 30
KINDS = ("png", "jpg", "tif", "bmp", "deflate.tif", "dcm")


# ---- pictures found by fuzzing

READ_EACH = """
import json, resource, sys
from pathlib import Path
from vasohm.errors import VasohmError
from vasohm.image.read import ReadSettings, read_image
resource.setrlimit(resource.RLIMIT_AS, (int(sys.argv[1]), int(sys.argv[1])))
for line in sys.stdin:
    try:
        shape = read_image(Path(line[:-1]), ReadSettings("max", 100.0, 0)).pixels.shape
        told = ["pixels", str(shape)]
    except VasohmError as fault:
        told = [fault.code, str(fault)]
    except BaseException as fault:
        told = ["!" + type(fault).__name__, str(fault)]
    print(json.dumps(told), flush=True)
"""


class Reader:
    """A child process that reads one file after the other, watched by the clock."""

    def __init__(self) -> None:
        words = [sys.executable, "-c", READ_EACH, str(LIMIT_BYTES)]
        self._child = subprocess.Popen(words, stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True)
        self._lines: queue.Queue[str] = queue.Queue()
        threading.Thread(target=self._listen, daemon=True).start()

    def _listen(self) -> None:
        for line in self._child.stdout:
            self._lines.put(line)
        self._lines.put("")

    def read(self, path: Path) -> tuple[str, str]:
        """Return what a file came to; a child that died or hangs is replaced."""
        self._child.stdin.write(f"{path}\n")
        self._child.stdin.flush()
        try:
            line = self._lines.get(timeout=FILE_S)
        except queue.Empty:
            line = "hang"
        if line.startswith("["):
            kind, words = json.loads(line)
            return kind, words
        self.close()
        status = self._child.returncode
        self.__init__()
        return ("!hang", "") if line == "hang" else ("!crash", str(status))

    def close(self) -> None:
        """End the child."""
        self._child.kill()
        self._child.wait()
        self._child.stdin.close()
        self._child.stdout.close()


@pytest.mark.slow
@pytest.mark.parametrize("name", ["pillow-13.0.0", "pydicom-3.0.2"])
def test_pictures_found_by_fuzzing_are_refused_or_read(name: str) -> None:
    """Wrong if one of them ended the process, stood still, or raised what no caller expects."""
    place = CORPORA / name
    if not place.is_dir():
        pytest.skip(f"{name} is not there: python tests/corpora.py fetches it")
    reader = Reader()
    try:
        told = {path.name: reader.read(path) for path in sorted(place.iterdir())}
    finally:
        reader.close()
    assert len(told) > 100
    assert not {file: came for file, came in told.items() if came[0].startswith("!")}
    for kind, words in told.values():
        assert kind == "pixels" or words.isprintable()
    assert sum(kind == "pixels" for kind, _ in told.values()) > len(told) // 10  # else the reader refuses everything


# ---- bytes changed at random


def encoded(kind: str) -> bytes:
    """Return a sound file of a kind."""
    if kind == "dcm":
        return dicom_bytes(GREY)
    stream = io.BytesIO()
    if kind == "deflate.tif":
        tifffile.imwrite(stream, np.stack([GREY] * 3), compression="zlib", photometric="minisblack", tile=(16, 16))
    else:
        form = {"jpg": "JPEG", "tif": "TIFF"}.get(kind, kind.upper())
        Image.fromarray(GREY).save(stream, form)
    return stream.getvalue()


@pytest.mark.parametrize("kind", KINDS)
@settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(data=st.data())
def test_changed_bytes_are_refused_by_name_or_read(kind: str, data: st.DataObject, tmp_path: Path) -> None:
    """Any other exception would be told as a fault of the program, and a library's crash would end a worker."""
    held = bytearray(encoded(kind))
    for _ in range(data.draw(st.integers(1, 4))):
        at = data.draw(st.integers(0, max(0, len(held) - 1)))
        deed = data.draw(st.sampled_from(["cut", "flip", "lengthen", "drop", "swell"]))
        if deed == "cut":
            del held[at:]
        elif deed == "drop":
            del held[at : at + data.draw(st.integers(1, 8))]
        elif deed == "flip" and held:
            held[at] ^= 1 << data.draw(st.integers(0, 7))
        elif deed == "swell":  # lengths and sizes near their greatest value
            held[at : at + 4] = data.draw(st.sampled_from([b"\xff\xff\xff\xff", b"\x7f\xff\xff\xff", b"\0\0\0\0"]))
        else:
            held[at:at] = data.draw(st.binary(min_size=1, max_size=20))
    path = tmp_path / f"changed.{kind}"
    path.write_bytes(held)
    with contextlib.suppress(VasohmError):
        raw = read_image(path, SETTINGS)
        assert raw.pixels.size > 0
        assert raw.pixels.shape[0] * raw.pixels.shape[1] <= 400e6


# ---- DICOM


def dicom(pixels: np.ndarray, **tags: object) -> "pydicom.Dataset":
    """Return a data set of ophthalmic photography (DICOM PS3.3, C.7.6.3 and C.8.17)."""
    held = pydicom.Dataset()
    held.file_meta = pydicom.dataset.FileMetaDataset()
    held.file_meta.TransferSyntaxUID = pydicom.uid.ExplicitVRLittleEndian
    held.file_meta.MediaStorageSOPClassUID = "1.2.840.10008.5.1.4.1.1.77.1.5.1"
    held.file_meta.MediaStorageSOPInstanceUID = "1.2.3.4"
    is_colour = pixels.ndim == 3 and pixels.shape[-1] == 3
    frames = pixels.shape[0] if pixels.ndim == 3 and not is_colour else 1
    shape = pixels.shape[-3:-1] if is_colour else pixels.shape[-2:]
    held.Rows, held.Columns = shape
    held.SamplesPerPixel = 3 if is_colour else 1
    held.PhotometricInterpretation = "RGB" if is_colour else "MONOCHROME2"
    if is_colour:
        held.PlanarConfiguration = 0
    if frames > 1:
        held.NumberOfFrames = frames
    held.BitsAllocated = held.BitsStored = 8 * pixels.dtype.itemsize
    held.HighBit = held.BitsStored - 1
    held.PixelRepresentation = 0
    held.PixelData = pixels.tobytes()
    for name, value in tags.items():
        setattr(held, name, value)
    return held


def dicom_bytes(pixels: np.ndarray, **tags: object) -> bytes:
    stream = io.BytesIO()
    pydicom.dcmwrite(stream, dicom(pixels, **tags), enforce_file_format=True)
    return stream.getvalue()


def read_dicom(folder: Path, pixels: np.ndarray, **tags: object) -> RawImage:
    (folder / "a.dcm").write_bytes(dicom_bytes(pixels, **tags))
    return read_image(folder / "a.dcm", SETTINGS)


COLOUR = np.stack([GREY, np.roll(GREY, 5, axis=0), np.roll(GREY, 9, axis=1)], axis=-1)


def test_dicom_pixels_are_those_that_were_stored(tmp_path: Path) -> None:
    """MONOCHROME1 shows zero as white (PS3.3, C.7.6.3.1.2); frames are planes of a stack; spare bits hold nothing."""
    np.testing.assert_array_equal(read_dicom(tmp_path, GREY).pixels, GREY)
    np.testing.assert_array_equal(read_dicom(tmp_path, COLOUR).pixels, COLOUR)
    inverted = read_dicom(tmp_path, 255 - GREY, PhotometricInterpretation="MONOCHROME1")
    np.testing.assert_array_equal(inverted.pixels, GREY)
    stack = np.stack([GREY // 2, GREY, GREY // 3, GREY // 4])
    raw = read_dicom(tmp_path, stack)
    assert raw.is_maximum
    np.testing.assert_array_equal(raw.pixels, GREY)
    twelve = GREY.astype(np.uint16) * 16
    raw = read_dicom(tmp_path, twelve | 0x8000, BitsStored=12, HighBit=11)  # an overlay in the highest bit
    np.testing.assert_array_equal(raw.pixels, twelve)
    assert raw.white_level == 4095


def test_dicom_colours_as_brightness_and_differences_become_red_green_and_blue(tmp_path: Path) -> None:
    """YBR_FULL by the equations of PS3.3, C.7.6.3.1.2, which are those of JFIF; rounded to whole numbers."""
    y, b, r = (COLOUR @ np.array(row) + off for row, off in (
        ((0.2990, 0.5870, 0.1140), 0), ((-0.1687, -0.3313, 0.5000), 128), ((0.5000, -0.4187, -0.0813), 128)
    ))  # fmt: skip
    stored = np.clip(np.rint(np.stack([y, b, r], axis=-1)), 0, 255).astype(np.uint8)
    raw = read_dicom(tmp_path, stored, PhotometricInterpretation="YBR_FULL")
    rounding = 3  # half a unit in each of three numbers, the greatest weight 1.772, and clipping
    assert np.abs(raw.pixels.astype(int) - COLOUR.astype(int)).max() <= rounding


def test_dicom_pixel_spacing_is_the_scale_and_no_other_spacing_is(tmp_path: Path) -> None:
    """Pixel Spacing is in millimetres, rows first (PS3.3, 10.7.1.3); a detector's or scanner's is not the tissue's."""
    raw = read_dicom(tmp_path, GREY, PixelSpacing=[0.007, 0.007], PixelSpacingCalibrationType="FIDUCIAL")
    assert raw.file_pixel_size_um == pytest.approx(7.0, rel=1e-12)
    assert raw.file_pixel_size_source == "dicom"
    assert any("by an object of known size" in note for note in raw.notes)
    other = read_dicom(tmp_path, GREY, ImagerPixelSpacing=[0.1, 0.1], NominalScannedPixelSpacing=[0.2, 0.2])
    assert other.file_pixel_size_um is None
    with pytest.raises(ScaleError, match=r"not square \(dicom: 8 x 7 um"):
        read_dicom(tmp_path, GREY, PixelSpacing=[0.007, 0.008])
    with pytest.raises(ScaleError, match="aspect 1 to 2"):
        read_dicom(tmp_path, GREY, PixelAspectRatio=[1, 2])


def test_dicom_tells_side_length_text_and_field(make_study: MakeStudy, tmp_path: Path) -> None:
    """A right eye in the row of a left one is a mix-up; text in the picture may name the patient."""
    raw = read_dicom(
        tmp_path,
        GREY,
        PixelSpacing=[0.007, 0.007],
        ImageLaterality="R",
        AxialLengthOfTheEye=24.5,
        BurnedInAnnotation="YES",
        HorizontalFieldOfView=45.0,
    )
    assert (raw.subject.side, raw.subject.axial_length_mm) == ("right", 24.5)
    assert raw.flags == Flag.BURNED_IN | Flag.FIELD_ANGLE  # 40 pixels of 7 um are no 45 degrees
    study = make_study(1)
    Image.fromarray(draw(0)).save(study.folder / "image-0.png")
    (study.folder / "a.dcm").write_bytes((tmp_path / "a.dcm").read_bytes())
    study.sheet({"a": "a.dcm,left"}, "image_id,file,eye")
    ended = study.run("check", study.file)
    assert ended.status == 2
    assert "the sheet says eye = 'left', the file itself says that it shows the right one" in ended.complained


def test_dicom_that_cannot_be_read_is_refused_by_name(tmp_path: Path) -> None:
    with pytest.raises(TooLargeError, match="900 megapixels"):
        read_dicom(tmp_path, GREY, Rows=30_000, Columns=30_000)
    with pytest.raises(VasohmError, match="holds 1920 of 19200 bytes"):
        read_dicom(tmp_path, GREY, Rows=480)
    with pytest.raises(UnsupportedPixelsError, match="PALETTE COLOR"):
        read_dicom(tmp_path, GREY, PhotometricInterpretation="PALETTE COLOR")
    with pytest.raises(UnsupportedPixelsError, match="no brightness"):
        read_dicom(tmp_path, GREY, RescaleSlope=2, RescaleIntercept=-1024)


# ---- identities

CANARY = "Kanarienvogel"
PERSON_TAGS = (
    "PatientName",
    "PatientID",
    "OtherPatientNames",
    "PatientAddress",
    "PatientComments",
    "InstitutionName",
    "InstitutionAddress",
    "ReferringPhysicianName",
    "PerformingPhysicianName",
    "OperatorsName",
    "StudyDescription",
    "SeriesDescription",
    "ProtocolName",
    "StationName",
    "DeviceSerialNumber",
    "AccessionNumber",
    "StudyID",
    "RequestingPhysician",
    "PatientMotherBirthName",
    "EthnicGroup",
    "Occupation",
    "AdditionalPatientHistory",
    "ImageComments",
    "InstitutionalDepartmentName",
    "ManufacturerModelName",
    "Manufacturer",
    "PatientTelephoneNumbers",
    "MilitaryRank",
    "BranchOfService",
)


def person_dicom() -> bytes:
    """A name in thirty-odd tags: plain, private, in sequences, in another character set, and misplaced."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # a name where a code word belongs
        return _person_dicom()


def _person_dicom() -> bytes:
    held = dicom(draw(0), PixelSpacing=[0.002, 0.002], SpecificCharacterSet="ISO_IR 192")
    for name in PERSON_TAGS:
        setattr(held, name, CANARY[:16])
    inner = pydicom.Dataset()
    inner.PatientName = CANARY
    held.OtherPatientIDsSequence = [inner]
    held.RequestAttributesSequence = [inner]
    block = held.private_block(0x0099, CANARY, create=True)
    block.add_new(0x01, "LO", CANARY)
    block.add_new(0x02, "UT", CANARY * 10)
    held.ImageLaterality = CANARY[:16]  # where a code word belongs
    held.BurnedInAnnotation = CANARY[:16]
    held.PixelSpacingCalibrationType = CANARY[:16]
    stream = io.BytesIO()
    pydicom.dcmwrite(stream, held, enforce_file_format=True)
    return stream.getvalue()


def person_jpeg() -> bytes:
    """A photograph with its owner, serial number and place in EXIF (CIPA DC-008), a comment and XMP."""
    exif = Image.Exif()
    exif[0x010E] = exif[0x013B] = exif[0x8298] = exif[0x0131] = CANARY
    exif.get_ifd(0x8769)[0xA430] = CANARY
    exif.get_ifd(0x8769)[0xA431] = CANARY
    exif.get_ifd(0x8825)[0x001C] = b"ASCII\0\0\0" + CANARY.encode()
    stream = io.BytesIO()
    Image.fromarray(draw(1)).save(stream, "JPEG", quality=98, exif=exif, comment=CANARY.encode())
    return stream.getvalue()


def person_tiff() -> bytes:
    stream = io.BytesIO()
    tifffile.imwrite(stream, draw(2), description=f"Patient {CANARY}", software=CANARY, metadata=None)
    return stream.getvalue()


def traces(data: bytes) -> list[str]:
    """Ways in which the canary stands in some bytes: plain, UTF-16, and base64 at any of three offsets."""
    found = []
    for way, wanted in (("plain", CANARY.encode()), ("utf-16", CANARY.encode("utf-16-le"))):
        if wanted in data:
            found.append(way)
        found += [
            f"{way} in base64"
            for shift in range(3)
            if base64.b64encode(b"\0" * shift + wanted)[4 if shift else 0 : -4] in data
        ]
    return found


@pytest.mark.usefixtures("one_process")
def test_no_identity_of_a_file_reaches_an_output(make_study: MakeStudy, tmp_path: Path) -> None:
    """Also not of files that fail, nor in the log: an identity in a table is one that is mailed."""
    study, out = make_study(3), tmp_path / "out"
    files = {"a.dcm": person_dicom(), "b.jpg": person_jpeg(), "c.tif": person_tiff()}
    files |= {f"cut-{name}": data[: int(0.8 * len(data))] for name, data in files.items()}
    assert all(traces(data) for name, data in files.items() if not name.startswith("cut"))
    assert traces(base64.b64encode(b"x" + CANARY.encode() + b"y"))  # teeth
    for name, data in files.items():
        (study.folder / name).write_bytes(data)
    study.sheet({f"image-{n}": name for n, name in enumerate(files)})
    ended = study.measure(out)
    assert list(states(out).values()) == ["measured"] * 3 + ["failed"] * 3, failures(out)
    written = [path for path in out.rglob("*") if path.is_file()]
    assert len(written) > 50
    assert not {str(path): found for path in written if (found := traces(path.read_bytes()))}
    assert not traces((ended.told + ended.complained).encode())


def test_a_pixel_size_from_dicom_brings_its_doubt(tmp_path: Path) -> None:
    """The spacing is nominal: 5 % unless somebody tells it better (common practice, no source)."""
    from vasohm.config.study_file import study_from_mapping

    settings_of = study_from_mapping({"image": {"preset": "fundus"}}, tmp_path).settings.scale
    raw = read_dicom(tmp_path, GREY, PixelSpacing=[0.007, 0.007])
    scaled = calibrate(raw, TypedScale(None, None), settings_of)
    assert (scaled.pixel_size_source, scaled.pixel_size_se_um) == ("dicom", pytest.approx(0.35))
    assert calibrate(raw, TypedScale(7.0, None), settings_of).flags == Flag.PIXEL_SIZE_SE_UNKNOWN
