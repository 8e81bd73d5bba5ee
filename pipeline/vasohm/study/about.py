"""What a report of a problem needs to say about this installation; no host, user or folder is named."""

import importlib
from importlib.metadata import PackageNotFoundError, version

from threadpoolctl import threadpool_info  # type: ignore[import-untyped]

from vasohm.study.cores import usable_cores
from vasohm.study.current import PACKAGES
from vasohm.study.state import environment

_OPTIONAL = {"imagecodecs": "further compressions of TIFF, LZW among them"}
_CODECS = ("jpg", "zlib", "libtiff", "webp", "jpg_2000")


def about() -> list[tuple[str, str]]:
    """Return pairs of what and value: versions, cores and who granted them, codecs, BLAS and its threads."""
    from PIL import features  # noqa: PLC0415  only this command asks for codecs

    cores = usable_cores()
    facts = [(package, version(package)) for package in PACKAGES]
    facts += list(environment().items())
    facts.append(("workers", f"{cores.count} (from {cores.source})"))
    facts.append(("codecs", ", ".join(name for name in _CODECS if features.check(name))))
    facts += [(package, _optional(package, use)) for package, use in _OPTIONAL.items()]
    for package in ("numpy", "scipy.linalg"):
        importlib.import_module(package)
    seen = dict.fromkeys(
        f"{pool['internal_api']} {pool.get('version') or ''}".strip()
        + f", {pool['num_threads']} threads here, 1 in a worker"
        for pool in threadpool_info()
    )
    facts += [("threads", pool) for pool in seen]
    return facts


def _optional(package: str, use: str) -> str:
    try:
        return version(package)
    except PackageNotFoundError:
        return f"not installed ({use})"
