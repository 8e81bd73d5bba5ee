"""The one error that a wrong recipe or an impossible scene raises."""

from collections.abc import Sequence


class RecipeError(ValueError):
    """A phantom that cannot be made as it was asked for; holds every problem found, not only the first."""

    def __init__(self, problems: Sequence[str]) -> None:
        self.problems = tuple(problems)
        super().__init__("\n".join(self.problems))


def refuse(problems: Sequence[str]) -> None:
    """Raise `RecipeError` with all problems, or return when there is none.

    Raises
    ------
    RecipeError
        When `problems` is not empty.
    """
    if problems:
        raise RecipeError(problems)
