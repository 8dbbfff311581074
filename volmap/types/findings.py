"""What was seen in data that are bad but readable."""

from __future__ import annotations

from dataclasses import asdict, dataclass
from enum import StrEnum
from typing import Any


class Level(StrEnum):
    """How much a finding weighs."""

    NOTE = "note"
    WARN = "warn"
    REFUSE = "refuse"


@dataclass(frozen=True)
class Finding:
    """One thing seen.

    Parameters
    ----------
    level : Level
    code : str
        Short stable word for scripts ("cavities").
    where : str
        File and label.
    sentence : str
        What was seen and what it means.
    remedy : str
        What the user can do.
    """

    level: Level
    code: str
    where: str
    sentence: str
    remedy: str = ""

    def as_dict(self) -> dict[str, Any]:
        """Plain values, for JSON."""
        return asdict(self) | {"level": self.level.value}

    @property
    def line(self) -> str:
        """One line for a terminal."""
        tail = f"; {self.remedy}" if self.remedy else ""
        return f"{self.level.value}: {self.where}: {self.sentence}{tail}"
