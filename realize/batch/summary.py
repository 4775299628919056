"""What came of a run."""

from __future__ import annotations

import math
from dataclasses import asdict, dataclass, field
from typing import Any

#: Files that are named in a summary, of each kind; the records have them all.
NAMED = 1000


@dataclass
class Summary:
    """Counts, the worst claims, and the files that need a look.

    Attributes
    ----------
    files, done, kept, set_aside, earlier : int
        Inputs; those that went through; those kept although a claim failed; those set aside; those of all these that
        an earlier run had finished.
    worst : list of dict
        For each step and claim the largest value, with the file, the limit and the place.
    aside : list of dict
        File, step and reason of what was set aside or kept, up to 1000.
    reports : list of str
        Paths of the reports that were made.
    stopped : str
        Why the run ended before its end; empty where it did not.
    status : int
        Exit status.
    """

    job: str
    output: str
    records: str
    files: int = 0
    done: int = 0
    kept: int = 0
    set_aside: int = 0
    earlier: int = 0
    worst: list[dict[str, Any]] = field(default_factory=list)
    aside: list[dict[str, Any]] = field(default_factory=list)
    reports: list[str] = field(default_factory=list)
    notes: list[str] = field(default_factory=list)
    stopped: str = ""
    seconds: float = 0.0
    status: int = 0

    def add(self, records: list[dict[str, Any]], *, earlier: bool) -> None:
        """Count one file."""
        statuses = [record["status"] for record in records]
        bad = "set-aside" in statuses
        self.set_aside += bad
        self.kept += not bad and "kept" in statuses
        self.done += not bad and "kept" not in statuses
        self.earlier += earlier
        for record in records:
            if record["status"] != "done" and len(self.aside) < NAMED:
                named = ("file", "step", "verb", "status", "why", "reason")
                self.aside.append({name: record[name] for name in named if name in record})
            if "report" in record:
                self.reports.append(record["output"])
            for claim in record.get("claims", ()):
                self._weigh(record, claim)

    def _weigh(self, record: dict[str, Any], claim: dict[str, Any]) -> None:
        value = math.inf if claim["infinite"] else claim["value"]
        if value is None or claim["name"] == "order":
            return
        for row in self.worst:
            if (row["step"], row["name"]) == (record["step"], claim["name"]):
                break
        else:
            row = {"step": record["step"], "verb": record["verb"], "name": claim["name"], "files": 0}
            self.worst.append(row | {"value": None, "infinite": False, "file": "", "limit": None, "failed": 0})
            row = self.worst[-1]
        row["files"] += 1
        row["failed"] += claim["holds"] is False
        before = math.inf if row["infinite"] else row["value"]
        # stability is 1 where it is kept and 0 where it is lost; every other claim is worse where it is larger
        if before is None or (value < before if claim["name"] == "stability" else value > before):
            row.update(
                value=None if math.isinf(value) else value,
                infinite=math.isinf(value),
                file=record["file"],
                limit=claim["limit"],
                basis=claim["basis"],
                unit=claim["unit"],
            )

    def record(self) -> dict[str, Any]:
        """Return the summary as plain data."""
        return asdict(self)
