"""Reading a small plan whole, and the problems that come of it."""

from pathlib import Path

import pytest

from tests.stages.small import Table, write_plan
from tillwright.errors import PlanError, PlanProblem
from tillwright.plan import Plan
from tillwright.store.references import References, open_plan


def read(folder: Path, plan: Table | None = None) -> tuple[Plan, References]:
    """A plan and the small files it names."""
    return open_plan(write_plan(folder, plan))


def problems(folder: Path, plan: Table | None = None) -> dict[str, PlanProblem]:
    """The problems of a plan by key; the message holds them all."""
    with pytest.raises(PlanError) as caught:
        read(folder, plan)
    error = caught.value
    assert error.exit_status == 2
    for problem in error.problems:
        assert problem.key
        assert problem.found
        assert problem.allowed
        assert str(problem) in str(error)
    return {problem.key: problem for problem in error.problems}
