"""A compile from plan to result, whoever orchestrates it."""

from __future__ import annotations

import hashlib
import re
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from datetime import date
from pathlib import Path
from typing import Literal, TypeAlias

from tillwright.errors import CallError
from tillwright.periods import EXAMPLES, parse_period
from tillwright.plan import Plan
from tillwright.queries import Resources
from tillwright.stages.context import Context
from tillwright.stages.intake import receive
from tillwright.stages.keyed import Run, StepResult, code_version
from tillwright.stages.sequence import Step, compile_steps, intake_steps
from tillwright.store.ledger import Ledger
from tillwright.store.references import open_plan
from tillwright.store.workspace import Workspace

Orchestrate: TypeAlias = Callable[[str, Sequence[Step]], list[StepResult]]


@dataclass(frozen=True, slots=True)
class Request:
    """What the caller of a compile asks for."""

    plan: Path
    work: Path | None = None
    through: str | None = None
    memory: str = "4GB"
    scope: Literal["compile", "intake"] = "compile"
    orchestrator: str = "direct"


@dataclass(frozen=True, slots=True)
class Compiled:
    """A finished compile: where its tables are and what each step did."""

    context: Context
    steps: tuple[StepResult, ...]


def in_order(_: str, steps: Sequence[Step]) -> list[StepResult]:
    """Run steps one after another, without an orchestrator."""
    return [step.run() for step in steps]


def carry_out(request: Request, orchestrate: Orchestrate = in_order) -> Compiled:
    """Read the plan, receive files, and have the steps run.

    Raises
    ------
    PlanError, CallError : before any delivery is read.
    WorkspaceBusy : another compile holds the workspace.
    DataError : deliveries that cannot be read, or no usable sale.
    """
    context = _prepare(request)
    with Ledger(context.workspace.ledger) as ledger, _recorded(request, context, ledger) as run:
        context.workspace.sweep()
        deliveries = receive(context.plan, ledger)
        steps = (compile_steps if request.scope == "compile" else intake_steps)(run, deliveries)
        results = orchestrate(context.plan.plan.title, steps)
    return Compiled(context, tuple(results))


def workspace_of(request: Request) -> Workspace:
    """The workspace of a request: the folder given, or `work/` beside the plan."""
    return Workspace((request.work or request.plan.parent / "work").resolve())


def _prepare(request: Request) -> Context:
    plan, references = open_plan(request.plan)
    workspace = workspace_of(request)
    if not re.fullmatch(r"\d+(\.\d+)? ?[KMGT]i?B", request.memory, flags=re.IGNORECASE):
        raise CallError(f"--memory is '{request.memory}'; give a size such as 4GB or 800MB.")
    resources = Resources(request.memory, spill=workspace.spill)
    through = None
    if request.through is not None:
        through = _through(request.through, plan)
    return Context(plan, references, workspace, resources, through)


def _through(text: str, plan: Plan) -> date:
    kind = plan.plan.period
    try:
        day = parse_period(text, kind)
    except ValueError:
        raise CallError(f"--through is '{text}'; give a {kind} such as {EXAMPLES[kind]}.") from None
    if day < plan.plan.first_day:
        raise CallError(f"--through is '{text}', before the plan's start {plan.plan.start}.")
    return day


@contextmanager
def _recorded(request: Request, context: Context, ledger: Ledger) -> Iterator[Run]:
    """A run in the ledger, closed with its outcome whatever happens short of a kill."""
    digest = hashlib.sha256(request.plan.read_bytes()).hexdigest()
    number = ledger.start_run(
        plan=str(request.plan), plan_sha256=digest, code=code_version(), orchestrator=request.orchestrator
    )
    try:
        yield Run(context, ledger, number)
    except BaseException as error:
        ledger.end_run(number, f"failed: {type(error).__name__}")
        raise
    ledger.end_run(number, "finished")
