"""What Linefall says when something is not as it should be: a warning, a refusal, or bad input.

A `Notice` travels with a result. A `CannotMeasure` ends a run because the footage does not carry the
measurement; a `BadInput` ends it because a file or a key is wrong. All three say what was found and
what to do, so that whoever shows them adds nothing.
"""

from dataclasses import dataclass

__all__ = ["BadInput", "CannotMeasure", "Notice"]


@dataclass(frozen=True, slots=True)
class Notice:
    """A warning that stands in the result.

    Attributes
    ----------
    code : str
        Stable, kebab-case: a program may rely on it.
    says : str
        What was found, and where, as one sentence.
    damage : str
        What it does to the result, in the result's units where that can be said.
    remedy : str
        What to do about it, in the next shot or in the sheet.
    """

    code: str
    says: str
    damage: str = ""
    remedy: str = ""

    def sentence(self) -> str:
        """All of it as one line for a screen."""
        return " ".join(part for part in (self.says, self.damage, self.remedy) if part)


class CannotMeasure(Exception):
    """The footage cannot carry the measurement.

    Parameters
    ----------
    says : str
        What is missing, and where.
    remedy : str
        How to shoot it again.
    code : str
        Stable, kebab-case.
    """

    def __init__(self, says: str, remedy: str, code: str = "cannot-measure") -> None:
        super().__init__(says)
        self.says, self.remedy, self.code = says, remedy, code

    def __str__(self) -> str:
        return f"{self.says} {self.remedy}".strip()


class BadInput(Exception):
    """A file or one of its keys is wrong.

    Parameters
    ----------
    says : str
        File, key and value: what was found.
    remedy : str
        What to write instead.
    """

    def __init__(self, says: str, remedy: str = "") -> None:
        super().__init__(says)
        self.says, self.remedy = says, remedy

    def __str__(self) -> str:
        return f"{self.says} {self.remedy}".strip()
