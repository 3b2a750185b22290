"""The few kinds of failure a person meets, each with what that person needs to put it right."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass


@dataclass(frozen=True)
class Fault:
    """One thing wrong with a site's files: where it stands, what it is, what would be right."""

    file: str
    problem: str
    remedy: str
    line: int | None = None
    column: str | None = None
    tag: str | None = None

    def __str__(self) -> str:
        where = self.file if self.line is None else f"{self.file}:{self.line}"
        parts = [where]
        if self.column is not None:
            parts.append(f"column {self.column}")
        if self.tag is not None:
            parts.append(f"tag {self.tag}")
        return f"{', '.join(parts)}: {self.problem} — {self.remedy}"


class AuditError(Exception):
    """Base of all failures whose message is meant for a person; carries a remedy.

    ``exit_code`` is what a command that ends with this error returns (contract: 1 unexpected,
    2 the command or the site's files are wrong).
    """

    exit_code = 2

    def __init__(self, message: str, remedy: str = "") -> None:
        super().__init__(message)
        self.message = message
        self.remedy = remedy

    def __str__(self) -> str:
        return f"{self.message} — {self.remedy}" if self.remedy else self.message

    def __reduce__(self) -> tuple[object, ...]:
        """How a worker process hands it over: from what it was made of."""
        return type(self), (self.message, self.remedy)


class FilesWrong(AuditError):
    """The site's own files are wrong; holds every fault found, not just the first."""

    def __init__(self, faults: Sequence[Fault]) -> None:
        self.faults = tuple(faults)
        count = len(self.faults)
        head = "1 fault" if count == 1 else f"{count} faults"
        super().__init__(
            "\n".join([f"{head} in the site's files:", *(f"  {fault}" for fault in self.faults)])
        )

    def __reduce__(self) -> tuple[object, ...]:
        return type(self), (self.faults,)


class ExportRefused(AuditError):
    """One export file cannot be read; the audit goes on with the others."""

    def __init__(self, path: str, message: str, remedy: str, line: int | None = None) -> None:
        where = path if line is None else f"{path}:{line}"
        super().__init__(f"{where}: {message}", remedy)
        self.path = path
        self.line = line
        self.reason = message

    def __reduce__(self) -> tuple[object, ...]:
        return type(self), (self.path, self.reason, self.remedy, self.line)


class StoreUnready(AuditError):
    """The store cannot be used as it is: wrong schema, wrong site, held by another run."""


class UnknownLoop(AuditError):
    """A command or request names a loop that the register does not know."""
