"""Every exception that Tillwright raises on purpose.

    TillwrightError                 exit status
    ├── PlanError                   2   the plan is wrong; carries every problem found
    ├── CallError                   2   the command or function was called wrongly
    │   └── MissingColumns          2   a column was named that the file or frame does not have
    ├── DataError                   3   the data cannot be used
    │   ├── UnreadableDeliveries    3   files that cannot be read as what they claim to be
    │   ├── BadPanel                3   a panel that no index can be made of
    │   ├── UnconnectedPeriods      3   a window whose periods share no chain of products
    │   ├── NoLevel                 3   an index without a level in a period that is asked for
    │   ├── UnconnectedPlaces       3   places that share no chain of products
    │   └── TooFewObservations      3   a regression on attributes with too few prices to fit it
    ├── WorkspaceBusy               3   another compile holds the workspace
    ├── OrchestrationError          3   Prefect failed, not a step of the compile
    └── BrokenInvariant             3   a run-time check failed: a defect, never a result

A message says what, where, how many, and what to do next.  Facts are attributes.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass


class TillwrightError(Exception):
    """Base of all; `exit_status` is what the command ends with."""

    exit_status = 3


@dataclass(frozen=True, slots=True)
class PlanProblem:
    """One thing wrong with a plan: the key, what was found, what is allowed."""

    key: str
    found: str
    allowed: str

    def __str__(self) -> str:
        return f"{self.key}: found {self.found}; allowed: {self.allowed}"


class PlanError(TillwrightError):
    """The plan cannot be used; `problems` lists everything wrong with it."""

    exit_status = 2

    def __init__(self, source: str, problems: Sequence[PlanProblem]) -> None:
        self.source = source
        self.problems = tuple(problems)
        count = len(self.problems)
        lines = "\n".join(f"  - {problem}" for problem in self.problems)
        super().__init__(
            f"The plan {source} has {count} problem{'s' if count != 1 else ''}; nothing was read or written.\n{lines}"
        )


class CallError(TillwrightError):
    """A command or function was given something it cannot take."""

    exit_status = 2


class DataError(TillwrightError):
    """The data cannot be used as they are."""


@dataclass(frozen=True, slots=True)
class UnreadableFile:
    """One file that could not be read, and why."""

    feed: str
    file: str
    reason: str


class UnreadableDeliveries(DataError):
    """Deliveries that cannot be read; `files` names each with its reason."""

    def __init__(self, files: Sequence[UnreadableFile]) -> None:
        self.files = tuple(files)
        reasons: dict[str, list[str]] = {}
        for file in self.files:
            reasons.setdefault(f"(feed {file.feed}): {file.reason}", []).append(file.file)
        lines = "\n".join(f"  - {_some(names)} {reason}" for reason, names in reasons.items())
        count = len(self.files)
        super().__init__(
            f"{count} deliver{'ies' if count != 1 else 'y'} cannot be read; the others were taken "
            f"in, and no index was made.\n{lines}\n"
            "Ask the sender for a new file, or mend the feed's settings in the plan, and run again."
        )


class MissingColumns(CallError):
    """A column was named that is not there; `missing` and `present` are column names."""

    def __init__(self, where: str, missing: Sequence[str], present: Sequence[str]) -> None:
        self.where = where
        self.missing = tuple(missing)
        self.present = tuple(present)
        super().__init__(
            f"{where} has no column {_quoted(missing)}. "
            f"Its columns are {_quoted(present)}. Name the column that is meant."
        )


class BadPanel(DataError):
    """A panel that no index can be made of."""


class UnconnectedPeriods(DataError):
    """The priced periods of a window fall apart into groups that share no product.

    `groups` holds the periods of each group: positions when raised by a kernel, the
    period labels once `labelled` has been applied. `segment` is the position of the panel concerned
    among those compiled together.
    """

    def __init__(
        self, groups: Sequence[Sequence[object]], where: str = "", *, segment: int = 0, hint: str = ""
    ) -> None:
        self.groups = tuple(tuple(group) for group in groups)
        self.where = where
        self.segment = segment
        sides = " | ".join(_span(group, "periods") for group in self.groups)
        place = f" of {where}" if where else ""
        super().__init__(
            f"No index can be made over a window{place}: its periods fall into "
            f"{len(self.groups)} groups with no product in common ({sides}). Widen the product "
            "definition, join relaunched items, or choose a window that does not cross the gap." + hint
        )

    def labelled(self, labels: Sequence[object], where: str, hint: str = "") -> UnconnectedPeriods:
        """The same error with period labels instead of positions and the place named; a hint is added to the text."""
        named = [[labels[int(str(position))] for position in group] for group in self.groups]
        return UnconnectedPeriods(named, where, segment=self.segment, hint=hint)


class NoLevel(DataError):
    """An index has no level in a period that is asked for."""


class UnconnectedPlaces(DataError):
    """Places to be compared fall apart into groups that share no product; `groups` holds their names."""

    def __init__(self, groups: Sequence[Sequence[str]], where: str = "") -> None:
        self.groups = tuple(tuple(group) for group in groups)
        self.where = where
        sides = " | ".join(_span(group, "places") for group in self.groups)
        place = f" for {where}" if where else ""
        super().__init__(
            f"No price levels can be compared{place}: the places fall into {len(self.groups)} groups with no product "
            f"in common ({sides}). Widen the product definition, compare the places of each group, or leave what "
            "cannot be compared empty with unconnected 'blank'."
        )


class TooFewObservations(DataError):
    """A regression on attributes has fewer prices than asked for, or no more than it has parameters.

    `period` is the position of the period regressed alone when raised by a kernel, its label once `labelled`
    has been applied; None = the regression is over all periods.
    """

    def __init__(
        self,
        observations: int,
        parameters: int,
        least: int,
        *,
        period: object = None,
        where: str = "",
        hint: str = "",
    ) -> None:
        self.observations = observations
        self.parameters = parameters
        self.least = least
        self.period = period
        self.where = where
        place = f" for {where}" if where else ""
        time = "" if period is None else f" in period {period}"
        super().__init__(
            f"No hedonic regression can be made{place}{time}: it has {observations} prices of products with known "
            f"attributes, {parameters} parameters, and needs at least {max(least, parameters + 1)} prices. Name fewer "
            "attributes, join rare categories, take periods together, or lower the least number of prices." + hint
        )

    def labelled(self, labels: Sequence[object], where: str, hint: str = "") -> TooFewObservations:
        """The same error with the period's label instead of its position and the place named; a hint is added."""
        period = None if self.period is None else labels[int(str(self.period))]
        return TooFewObservations(self.observations, self.parameters, self.least, period=period, where=where, hint=hint)


class WorkspaceBusy(TillwrightError):
    """Another compile holds the workspace."""

    def __init__(self, workspace: str, detail: str) -> None:
        self.workspace = workspace
        super().__init__(
            f"The workspace {workspace} is in use by another compile ({detail}). "
            "Wait until it has ended, or give this one another folder with --work."
        )


class OrchestrationError(TillwrightError):
    """Prefect did not start, or broke off between steps; --direct does without it."""


class BrokenInvariant(TillwrightError):
    """A run-time check failed. Nothing was written for the stage concerned."""

    def __init__(self, check: str, detail: str) -> None:
        self.check = check
        super().__init__(
            f"The check '{check}' failed: {detail}. The stage's table was not written. "
            "This is a defect of Tillwright or of the machine; please report it with this message."
        )


def _quoted(names: Sequence[str]) -> str:
    return ", ".join(f"'{name}'" for name in names)


def _some(names: Sequence[str]) -> str:
    shown = ", ".join(names[:3])
    return shown if len(names) <= 3 else f"{shown} and {len(names) - 3} more"


def _span(group: Sequence[object], unit: str) -> str:
    shown = [str(member) for member in group]
    return ", ".join(shown) if len(shown) <= 4 else f"{shown[0]} … {shown[-1]} ({len(shown)} {unit})"
