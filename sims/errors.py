"""The one error that says a user's input is at fault; it stands at the root of the flow and imports nothing."""

from __future__ import annotations

from collections.abc import Sequence


class InputError(ValueError):
    """Bad input, with every problem found, not only the first.

    Parameters
    ----------
    problems : sequence of str
        One line a problem: where it is (configuration path, file, variable), what was
        wrong, what was got, and what is allowed.
    """

    def __init__(self, problems: Sequence[str] | str) -> None:
        self.problems: tuple[str, ...] = (problems,) if isinstance(problems, str) else tuple(problems)
        super().__init__("\n".join(self.problems))


def raise_if_any(problems: Sequence[str]) -> None:
    """Raise `InputError` with all `problems`, if there are any."""
    if problems:
        raise InputError(problems)
