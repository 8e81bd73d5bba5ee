"""Every error that vasohm raises on purpose; each message says what, which value, where, and what to do."""

from collections.abc import Sequence
from dataclasses import dataclass


class VasohmError(Exception):
    """Base of all errors that are the request's or the image's, not the program's; `code` is stable."""

    code = "error"


class ReadError(VasohmError):
    """An image file that cannot be turned into pixels."""

    code = "unreadable"


class InputMissingError(ReadError):
    """A file named in the sheet that is not there."""

    code = "input_missing"


class NotAnImageError(ReadError):
    """Bytes that are no image of a known format."""

    code = "not_an_image"


class TruncatedError(ReadError):
    """A file that ends before its picture does."""

    code = "truncated"


class TooLargeError(ReadError):
    """More pixels declared than the study allows; refused before decoding."""

    code = "too_large"


class MemoryLimitError(ReadError):
    """A picture that will take more memory than the study allows; refused before decoding."""

    code = "memory"


class UnsupportedPixelsError(ReadError):
    """A valid file whose sample type has no meaning as brightness here."""

    code = "unsupported_pixels"


class ScaleError(VasohmError):
    """No pixel size, or two that contradict each other."""

    code = "scale"


class MaskError(VasohmError):
    """A mask, class or field-of-view file that does not fit its image."""

    code = "mask"


class ImageError(VasohmError):
    """A picture that was read but cannot be measured."""

    code = "image"


class NetworkError(VasohmError, ValueError):
    """A network that has no solution as it was asked for."""

    code = "network"


class DomainError(VasohmError, ValueError):
    """A number outside the range in which a law or formula is defined."""

    code = "domain"


class PluginError(VasohmError):
    """A law or segmenter that is absent, fails to load, or returns what it must not."""

    code = "plugin"


class CohortError(VasohmError, ValueError):
    """A table of observations from which the groups or states asked for cannot be compared."""

    code = "cohort"


@dataclass(frozen=True, slots=True)
class Problem:
    """One thing wrong with a request: where it stands, what stands there, what to do."""

    file: str
    message: str
    row: int | None = None
    column: str = ""
    value: str = ""

    def __str__(self) -> str:
        place = self.file + (f":{self.row}" if self.row is not None else "")
        return f"{place}{' ' + self.column if self.column else ''}: {self.message}"


class RequestError(VasohmError):
    """A study file, sheet or option that is wrong; holds every problem found, not only the first."""

    code = "request"

    def __init__(self, problems: Sequence[Problem]) -> None:
        self.problems = tuple(problems)
        super().__init__("\n".join(str(problem) for problem in self.problems))
