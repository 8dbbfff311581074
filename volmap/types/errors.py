"""Errors a user can cause."""

from __future__ import annotations


class InputError(ValueError):
    """An input that cannot be used: one sentence that says what, where, found, expected, remedy.

    Parameters
    ----------
    what : str
        What is wrong, in words ("the affine is not invertible").
    where : str
        File name, option or array the fault is in.
    found, expected : str
        What was met and what would have been right.
    remedy : str
        What the user can do.
    refused : bool
        True when the data were readable and are refused for what they hold (exit status 1);
        False when they could not be read or are not what they say (exit status 3).
    """

    def __init__(
        self,
        what: str,
        *,
        where: str = "",
        found: str = "",
        expected: str = "",
        remedy: str = "",
        refused: bool = False,
    ) -> None:
        self.what, self.where, self.found = what, where, found
        self.expected, self.remedy, self.refused = expected, remedy, refused
        super().__init__(self.sentence)

    @property
    def sentence(self) -> str:
        """The whole error as one line."""
        parts = [f"{self.where}: {self.what}" if self.where else self.what]
        if self.found:
            parts.append(f"found {self.found}")
        if self.expected:
            parts.append(f"expected {self.expected}")
        line = ", ".join(parts)
        return " ".join((f"{line}; {self.remedy}" if self.remedy else line).split())

    def at(self, where: str) -> InputError:
        """The same error, with the place it was met in."""
        return InputError(
            self.what,
            where=where,
            found=self.found,
            expected=self.expected,
            remedy=self.remedy,
            refused=self.refused,
        )


class UnsaidError(InputError):
    """Something only the caller can say was not said, or does not fit what the input holds (status 2)."""
