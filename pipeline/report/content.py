"""Building blocks of a report: plain text in a tree, the same for HTML, PDF and terminal."""

from __future__ import annotations

from dataclasses import dataclass, field


@dataclass(frozen=True, slots=True, kw_only=True)
class Fact:
    """One labelled value, with a remark on it where there is one."""

    label: str
    text: str
    note: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class Facts:
    """Labelled values under each other."""

    rows: tuple[Fact, ...]
    kind: str = field(default="facts", init=False)


@dataclass(frozen=True, slots=True, kw_only=True)
class Table:
    """Rows under a head; `numeric` says per column whether it is set to the right."""

    title: str
    head: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    numeric: tuple[bool, ...]
    kind: str = field(default="table", init=False)


@dataclass(frozen=True, slots=True, kw_only=True)
class Notice:
    """A caution: its level ("stop", "care", "note"), its code, the sentence, the numbers behind it."""

    level: str
    code: str
    text: str
    measure: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class Notices:
    """Cautions, the worst first."""

    items: tuple[Notice, ...]
    kind: str = field(default="notices", init=False)


@dataclass(frozen=True, slots=True, kw_only=True)
class Picture:
    """A figure by its name in `pipeline.report.figures.FIGURES`; `alt` says what it shows."""

    name: str
    title: str
    alt: str
    kind: str = field(default="picture", init=False)


@dataclass(frozen=True, slots=True, kw_only=True)
class Prose:
    """A paragraph."""

    text: str
    kind: str = field(default="prose", init=False)


@dataclass(frozen=True, slots=True, kw_only=True)
class Steps:
    """Things to do, in order."""

    items: tuple[str, ...]
    kind: str = field(default="steps", init=False)


@dataclass(frozen=True, slots=True, kw_only=True)
class Signature:
    """A line to sign: what for, by whom; "not given" where the loop sheet names nobody."""

    role: str
    name: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Signatures:
    """The lines to sign."""

    rows: tuple[Signature, ...]
    kind: str = field(default="signatures", init=False)


Block = Facts | Table | Notices | Picture | Prose | Steps | Signatures


@dataclass(frozen=True, slots=True, kw_only=True)
class Section:
    """A titled part of the report; `key` is its name for links and programs."""

    key: str
    title: str
    blocks: tuple[Block, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Outline:
    """A whole report.

    Attributes
    ----------
    title, tag, service : str
        What the report is about.
    verdict : str
        "ready", "ready with cautions" or "withheld".
    headline : str
        The verdict as a sentence.
    summary : tuple of Fact
        What someone at the controller needs: the settings, or the cause of the refusal.
    sections : tuple of Section
    created : str
        When the record was made (ISO 8601).
    record_hash : str
        SHA-256 of the record's text, so that a printed page can be matched with its file.
    """

    title: str
    tag: str
    service: str
    verdict: str
    headline: str
    summary: tuple[Fact, ...]
    sections: tuple[Section, ...]
    created: str
    record_hash: str

    def pictures(self) -> tuple[str, ...]:
        """Names of all figures, in order."""
        return tuple(b.name for s in self.sections for b in s.blocks if isinstance(b, Picture))
