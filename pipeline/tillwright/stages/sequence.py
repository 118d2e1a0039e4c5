"""The list of steps of a compile, and what the result of each depends on."""

from __future__ import annotations

import hashlib
import time
from collections.abc import Callable, Collection, Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

import polars as pl

from tillwright.errors import UnreadableDeliveries
from tillwright.plan import Feed
from tillwright.stages.aggregation import aggregate_headings
from tillwright.stages.churning import assess_churn
from tillwright.stages.context import Context
from tillwright.stages.effects import measure_effects
from tillwright.stages.identity import define_products, list_items
from tillwright.stages.indexes import compile_indexes
from tillwright.stages.intake import Delivery, announced_period, check_gates, find_active, part_files, settle, take_in
from tillwright.stages.keyed import Run, StepResult, Work, perform
from tillwright.stages.panel import make_panel
from tillwright.stages.screening import screen
from tillwright.stages.successions import find_successions
from tillwright.store.deliveries import hash_file

# A batch is one task of the orchestrator: small files together, a large one alone.
BATCH_BYTES = 64 << 20
BATCH_FILES = 40


@dataclass(frozen=True, slots=True)
class Step:
    """One entry of the list: a name for people and a call without arguments.

    `reads_files` marks steps that read deliveries, which an orchestrator may try again.
    """

    name: str
    run: Callable[[], StepResult]
    reads_files: bool = False


def intake_steps(run: Run, deliveries: Sequence[Delivery]) -> list[Step]:
    """Steps of stage 1: batches of deliveries, then what became of each file, and the gates."""
    context, workspace = run.context, run.context.workspace
    active = find_active(context.plan, deliveries)
    needed = sorted(
        (delivery for delivery in deliveries if delivery.present), key=lambda delivery: id(delivery) not in active
    )
    once = {delivery.name: delivery for delivery in reversed(needed)}
    ordered = [delivery for delivery in deliveries if once.get(delivery.name) is delivery]
    batches = enumerate(_batches(ordered), start=1)
    taking = [_batch_step(run, f"intake {batch[0].feed.name} {number}", batch, active) for number, batch in batches]
    listing = [f"{d.feed.name} {d.file} {d.sha256} {d.arrival} {d.present}" for d in deliveries]
    rules = [f"{feed.name} {feed.replaces}" for feed in context.plan.feed]
    names = sorted({delivery.name for delivery in deliveries})
    return [
        *taking,
        _table_step(
            run,
            "deliveries",
            lambda: [*_all_readable(run), *listing, *rules, *_hashes(workspace.parts("totals", names))],
            ["deliveries"],
            lambda _: settle(context, deliveries),
        ),
        _table_step(run, "gates", lambda: _gate_inputs(context), ["gates"], check_gates),
    ]


def compile_steps(run: Run, deliveries: Sequence[Delivery]) -> list[Step]:
    """Every step of a compile, in order."""
    context = run.context
    return [
        *intake_steps(run, deliveries),
        _table_step(run, "items", lambda: _item_inputs(context), ["items"], list_items),
        _table_step(
            run,
            "successions",
            lambda: _succession_inputs(run),
            ["successions"],
            lambda context: find_successions(context, run.ledger.decisions()),
        ),
        _table_step(run, "products", lambda: _product_inputs(context), ["products"], define_products),
        _table_step(run, "panel", lambda: _panel_inputs(context), ["panel"], make_panel),
        _table_step(run, "churn", lambda: _churn_inputs(context), ["churn", "lives"], assess_churn),
        _table_step(run, "screening", lambda: _screening_inputs(context), ["screened"], screen),
        _table_step(
            run,
            "indexes",
            lambda: _index_inputs(context),
            ["ea_indexes", "failures", "hedonic_coefficients", "hedonic_fit"],
            compile_indexes,
        ),
        _table_step(run, "effects", lambda: _effect_inputs(context), ["screen_effects"], measure_effects),
        _table_step(
            run,
            "aggregation",
            lambda: _aggregation_inputs(context),
            ["headings"],
            aggregate_headings,
            context.workspace.headings_csv,
        ),
    ]


def _all_readable(run: Run) -> list[str]:
    """Nothing, or the error for every delivery of the run that could not be read."""
    if run.unreadable:
        raise UnreadableDeliveries(run.unreadable)
    return []


def _table_step(
    run: Run,
    name: str,
    inputs: Callable[[], Sequence[str]],
    tables: Sequence[str],
    do: Callable[[Context], int],
    *others: Path,
) -> Step:
    outputs = [*(run.context.workspace.path(table) for table in tables), *others]
    return Step(name, lambda: perform(run, Work(name, inputs(), outputs, lambda: do(run.context))))


def _batch_step(run: Run, name: str, batch: Sequence[Delivery], active: Collection[int]) -> Step:
    return Step(name, lambda: _take_in_batch(run, name, batch, active), reads_files=True)


def _batches(deliveries: Sequence[Delivery]) -> Iterator[list[Delivery]]:
    batch: list[Delivery] = []
    for delivery in deliveries:
        size = sum(member.bytes for member in batch) + delivery.bytes
        if batch and (size > BATCH_BYTES or len(batch) == BATCH_FILES or batch[0].feed.name != delivery.feed.name):
            yield batch
            batch = []
        batch.append(delivery)
    if batch:
        yield batch


def _take_in_batch(run: Run, name: str, batch: Sequence[Delivery], active: Collection[int]) -> StepResult:
    """Take in each delivery of a batch that is not taken in yet.

    Active ones that cannot be read are noted and told at the end; a superseded one may be what was replaced for
    that very reason.
    """
    started = time.monotonic()
    connection = run.context.connect()
    results: list[StepResult] = []
    for delivery in batch:

        def take(delivery: Delivery = delivery) -> int:
            return take_in(run.context, connection, delivery)

        outputs = part_files(run.context.workspace, delivery)
        try:
            work = Work(f"intake {delivery.name}", _delivery_inputs(run.context, delivery), outputs, take)
            results.append(perform(run, work))
        except UnreadableDeliveries as error:
            if id(delivery) in active:
                run.unreadable.extend(error.files)
    rows = sum(result.rows for result in results)
    return StepResult(name, rows, time.monotonic() - started, all(result.unchanged for result in results))


def _delivery_inputs(context: Context, delivery: Delivery) -> list[str]:
    feed, scope = delivery.feed, context.plan.plan
    announced = announced_period(feed, delivery.path.name)
    periods = f"{scope.period} {scope.month_rule} {scope.weeks}"
    return [delivery.sha256, _reading(feed), str(announced), periods, str(context.plan.classification.stratum)]


def _reading(feed: Feed) -> str:
    """The part of a feed's section that decides how a line is read."""
    return feed.model_dump_json(exclude={"files", "replaces", "announced", "gates"})


def _gate_inputs(context: Context) -> list[str]:
    limits = [f"{feed.name} {feed.gates.model_dump_json()}" for feed in context.plan.feed]
    return [
        *_table_hashes(context, "deliveries"),
        *_sold(context),
        *_hashes(context.workspace.parts("outlet_days", context.workspace.read("deliveries")["delivery"].to_list())),
        *_span(context),
        *limits,
        *_answers(context),
    ]


def _item_inputs(context: Context) -> list[str]:
    masters = hashlib.sha256(context.references.masters.write_csv().encode()).hexdigest()
    return [*_sold(context, "described"), masters]


def _succession_inputs(run: Run) -> list[str]:
    context = run.context
    rules = context.plan.successions
    if rules is None:
        return []
    decisions = [str(decision) for decision in run.ledger.decisions()]
    assignment = context.references.assignment.write_csv()
    sold = [*_sold(context), *_table_hashes(context, "items"), *_span(context)]
    return [*sold, assignment, rules.model_dump_json(), *decisions]


def _product_inputs(context: Context) -> list[str]:
    plan = context.plan
    parts = [f"{feed.name} {feed.item_part}" for feed in plan.feed]
    definition = plan.products.model_dump_json(exclude={"candidates"})
    tree = str(sorted(context.references.tree.parents.items()))
    tables = _table_hashes(context, "items", "successions")
    return [*tables, context.references.assignment.write_csv(), definition, tree, *parts]


def _panel_inputs(context: Context) -> list[str]:
    return [*_sold(context), *_table_hashes(context, "products"), *_span(context)]


def _churn_inputs(context: Context) -> list[str]:
    tables = _table_hashes(context, "products", "panel")
    return [*_sold(context), *tables, *_span(context), str(context.plan.weights.link_month)]


def _screening_inputs(context: Context) -> list[str]:
    return [
        *_table_hashes(context, "panel"),
        *_span(context),
        context.plan.screening.model_dump_json(),
        *(_way_inputs(context) if context.plan.screening.imputation != "off" else []),
    ]


def _way_inputs(context: Context) -> list[str]:
    """What decides how each elementary aggregate is compiled."""
    tree = str(sorted(context.references.tree.parents.items()))
    choices = [choice.model_dump_json() for choice in context.plan.hedonic]
    return [context.plan.index.model_dump_json(), *choices, tree]


def _index_inputs(context: Context) -> list[str]:
    return [
        *_table_hashes(context, "screened"),
        *_span(context),
        context.references.weights.write_csv(),
        context.references.outside.write_csv(),
        *_way_inputs(context),
        *_hedonic_inputs(context),
        str(context.plan.weights.link_month),
        *_answers(context),
    ]


def _effect_inputs(context: Context) -> list[str]:
    screening = context.plan.screening
    tables = _table_hashes(context, "screened", "ea_indexes")
    if not screening.on:
        return tables
    link_month = str(context.plan.weights.link_month)
    return [*tables, *_screening_inputs(context), *_way_inputs(context), *_hedonic_inputs(context), link_month]


def _hedonic_inputs(context: Context) -> list[str]:
    """What aggregates that are adjusted for quality rest on besides their prices; nothing without any."""
    if not context.plan.hedonic:
        return []
    return [
        context.plan.products.model_dump_json(exclude={"candidates"}),
        *_table_hashes(context, "items", "products"),
    ]


def _aggregation_inputs(context: Context) -> list[str]:
    plan, references = context.plan, context.references
    small = [references.weights.write_csv(), references.outside.write_csv(), str(references.tree)]
    return [
        *_table_hashes(context, "ea_indexes", "screened"),
        *_span(context),
        plan.weights.model_dump_json(),
        plan.plan.model_dump_json(),
        plan.release.model_dump_json(),
        *small,
    ]


def _sold(context: Context, *others: str) -> list[str]:
    """Hashes of what the active deliveries sold, and of further parts of theirs."""
    active = context.active_deliveries()
    return _hashes([path for table in ("sales", *others) for path in context.workspace.parts(table, active)])


def _span(context: Context) -> list[str]:
    return [context.periods().select(pl.col("period").cast(pl.String)).write_csv()]


def _answers(context: Context) -> list[str]:
    return [answer.model_dump_json() for answer in context.plan.answer]


def _table_hashes(context: Context, *tables: str) -> list[str]:
    return _hashes([context.workspace.path(table) for table in tables])


def _hashes(paths: Sequence[Path]) -> list[str]:
    """Names and hashes of the files that exist; `described` is only kept where a feed maps it."""
    return [f"{path.name} {hash_file(path)}" for path in paths if path.exists()]
