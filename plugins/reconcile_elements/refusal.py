"""How this domain refuses input: every mistake with a stable code, what is wrong, and what to write instead."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

from reconcile import did_you_mean

__all__ = ["Mistake", "Mistakes", "Refusal"]


class Mistake(str):
    """One mistake as it is told; reads ``what is wrong; what to write instead [code]``."""

    code: str
    message: str
    hint: str

    def __new__(cls, code: str, message: str, hint: str = "") -> Mistake:
        """Put the text together once."""
        joint = " " if message.endswith(("?", ".")) else "; "
        told = super().__new__(cls, f"{message}{joint}{hint} [{code}]" if hint else f"{message} [{code}]")
        told.code, told.message, told.hint = code, message, hint
        return told

    def __reduce__(self) -> tuple[type[Mistake], tuple[str, str, str]]:
        return Mistake, (self.code, self.message, self.hint)


class Refusal(ValueError):
    """The input is wrong: all its mistakes at once.

    Attributes
    ----------
    mistakes : tuple of Mistake
    code : str
        Code of the first one.
    """

    def __init__(self, mistakes: Mistake | Sequence[Mistake]) -> None:
        found = (mistakes,) if isinstance(mistakes, Mistake) else tuple(mistakes)
        super().__init__("\n".join(found))
        self.mistakes = found
        self.code = found[0].code

    def __reduce__(self) -> tuple[type[Refusal], tuple[tuple[Mistake, ...]]]:
        return Refusal, (self.mistakes,)


class Mistakes:
    """Collects mistakes, so that they are told together."""

    def __init__(self) -> None:
        self.found: list[Mistake] = []

    def add(self, code: str, message: str, hint: str = "") -> None:
        """Record one, unless it is there already."""
        self.extend([Mistake(code, message, hint)])

    def extend(self, mistakes: Sequence[Mistake]) -> None:
        """Record several."""
        self.found.extend(m for m in mistakes if m not in self.found)

    def unknown(self, names: Iterable[str], known: Iterable[str], where: str) -> None:
        """Record every name that is none of the known species."""
        known = list(known)
        for name in names:
            if name not in known:
                self.add(
                    "species-unknown",
                    f"{where}: {name!r} is not one of the species",
                    did_you_mean(name, known) or f"known: {', '.join(known)}",
                )

    def __bool__(self) -> bool:
        return bool(self.found)

    def raise_if_any(self) -> None:
        """Raise one `Refusal` with all of them, if there are any."""
        if self.found:
            raise Refusal(self.found)
