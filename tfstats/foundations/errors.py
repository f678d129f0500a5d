"""The one exception that every refusal raises, and the collector that lists all mistakes of an input at once."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from contextlib import contextmanager

__all__ = ["InputError", "Problems", "listed", "refusal", "refusal_text"]


class InputError(ValueError):
    """Input, a plan or an argument that tfstats refuses.

    Each entry of `problems` is one sentence that says where the mistake is, what was expected, what was found
    and what to do about it.  The message of the exception is all of them, one a line.

    Parameters
    ----------
    problems : str or iterable of str
        One refusal, or several found in the same input.

    Examples
    --------
    >>> import tfstats as tfs
    >>> tfs.InputError(["first mistake.", "second mistake."]).problems
    ('first mistake.', 'second mistake.')
    """

    problems: tuple[str, ...]

    def __init__(self, problems: str | Iterable[str]) -> None:
        self.problems = (problems,) if isinstance(problems, str) else tuple(problems)
        super().__init__("\n".join(self.problems))

    def __reduce__(self) -> tuple[type[InputError], tuple[tuple[str, ...]]]:
        # Without this a process pool would rebuild the exception from the joined text and lose the list.
        return type(self), (self.problems,)


def refusal_text(where: str, expected: str, got: object, remedy: str) -> str:
    """One sentence in the shape that all refusals share: where, expected, got, what to do."""
    return f"{where}: expected {expected}, got {got}; {remedy}."


def refusal(where: str, expected: str, got: object, remedy: str) -> InputError:
    """An `InputError` with one problem; `raise refusal(...)`."""
    return InputError(refusal_text(where, expected, got, remedy))


def listed(options: Iterable[object], *, most: int = 12) -> str:
    """Options as text, sorted, in double quotes, cut after `most`."""
    names = sorted({str(option) for option in options})
    shown = ", ".join(f'"{name}"' for name in names[:most])
    rest = len(names) - most
    return f"{shown} and {rest} more" if rest > 0 else shown or "nothing"


class Problems:
    """Collects the mistakes of one input so that they are refused together.

    Examples
    --------
    >>> from tfstats.foundations.errors import Problems
    >>> problems = Problems()
    >>> problems.add("alpha", "a number between 0 and 1", 5, "write 0.05 for five percent")
    >>> problems.found
    ['alpha: expected a number between 0 and 1, got 5; write 0.05 for five percent.']
    """

    def __init__(self) -> None:
        self.found: list[str] = []

    def add(self, where: str, expected: str, got: object, remedy: str) -> None:
        """Note one mistake."""
        self.found.append(refusal_text(where, expected, got, remedy))

    @contextmanager
    def gathering(self) -> Iterator[None]:
        """Take over the problems of an `InputError` raised inside, and go on."""
        try:
            yield
        except InputError as error:
            self.found.extend(error.problems)

    def raise_if_any(self) -> None:
        """Refuse the input if any mistake was noted (each text once, in the order found)."""
        if self.found:
            raise InputError(dict.fromkeys(self.found))
