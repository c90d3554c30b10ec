"""Remarks: what the program noticed about a spectrum, a run or a fit, in words."""

from dataclasses import dataclass


@dataclass(frozen=True, slots=True, order=True)
class Remark:
    """One thing noticed.

    Attributes
    ----------
    code
        Short stable identifier in kebab case, e.g. ``"reference-weak"``; the same trouble in
        two spectra has the same code (and the same `subject`).
    seen
        What was seen, one sentence with the number that made it a remark.
    matters
        How much it matters for the amounts or for k, one sentence; may be empty.
    todo
        What to do about it, one sentence; may be empty.
    doubtful
        True where the numbers of this spectrum may be off: its state becomes `doubtful`.
    subject
        What it is about: a species, a signal label or a file; empty for the whole spectrum.
    """

    code: str
    seen: str
    matters: str = ""
    todo: str = ""
    doubtful: bool = False
    subject: str = ""

    def __str__(self) -> str:
        return " ".join(part for part in (self.seen, self.matters, self.todo) if part)
