"""What a kernel refuses to compute, with a stable code."""

from __future__ import annotations

__all__ = ["Refusal"]


class Refusal(ValueError):
    """A question that has no meaningful answer, e.g. more faults than the checks can tell apart.

    Attributes
    ----------
    code : str
        Stable code.
    message, hint : str
        What is wrong, and what to ask instead.
    """

    def __init__(self, code: str, message: str, hint: str = "") -> None:
        super().__init__(code, message, hint)
        self.code = code
        self.message = message
        self.hint = hint

    def __str__(self) -> str:
        return f"{self.message}; {self.hint} [{self.code}]" if self.hint else f"{self.message} [{self.code}]"
