-- name: gates
-- meaning: what the active deliveries show against the limits of their feed, with the answers given
-- grain: gate, feed, subject
-- reads: deliveries, sales, outlet_days, replaced_days, gate_limits, periods, answers
-- params:
with active_deliveries as (
    select * from deliveries
    where status = 'active'
),

limits as (
    select * from gate_limits
),

known_periods as (
    select * from periods
),

given_answers as (
    select * from answers
),

refused_share as (
    select
        'refused-share' as gate,
        active_deliveries.feed,
        regexp_replace(active_deliveries.file, '^.*/', '') as subject,
        active_deliveries.lines_refused / greatest(active_deliveries.lines_received, 1) as measured,
        limits.refused_share as allowed,
        concat(active_deliveries.lines_refused, ' of ', active_deliveries.lines_received, ' lines refused') as note
    from active_deliveries
    inner join limits on active_deliveries.feed = limits.feed
),

feed_turnover as (
    select
        feed,
        period,
        cast(sum(turnover) as double) as turnover
    from sales
    where counted
    group by feed, period
),

feed_span as (
    select
        feed,
        min(period) as first_period
    from feed_turnover
    group by feed
),

turnover_steps as (
    select
        feed_span.feed,
        known_periods.period,
        known_periods.label,
        coalesce(feed_turnover.turnover, 0) as turnover,
        last_value(feed_turnover.turnover ignore nulls) over (
            partition by feed_span.feed
            order by known_periods.period
            rows between unbounded preceding and 1 preceding
        ) as turnover_before
    from feed_span
    inner join known_periods on feed_span.first_period <= known_periods.period
    left join feed_turnover
        on feed_span.feed = feed_turnover.feed and known_periods.period = feed_turnover.period
),

turnover_swing as (
    select
        'turnover-swing' as gate,
        turnover_steps.feed,
        turnover_steps.label as subject,
        abs(turnover_steps.turnover / turnover_steps.turnover_before - 1) as measured,
        limits.turnover_swing as allowed,
        concat(
            'turnover ', cast(turnover_steps.turnover as decimal(38, 2)),
            ' after ', cast(turnover_steps.turnover_before as decimal(38, 2))
        ) as note
    from turnover_steps
    inner join limits on turnover_steps.feed = limits.feed
    where turnover_steps.turnover_before > 0
),

outlet_periods as (
    select distinct
        outlet_days.feed,
        outlet_days.outlet,
        known_periods.period
    from outlet_days
    inner join known_periods
        on outlet_days.day >= known_periods.period and outlet_days.day < known_periods.next_period
    where outlet_days.outlet <> ''
),

gone_outlets as (
    select
        was.feed,
        known_periods.label,
        was.outlet,
        here.outlet is null as gone
    from outlet_periods as was
    inner join known_periods on was.period = known_periods.previous_period
    left join outlet_periods as here
        on was.feed = here.feed and was.outlet = here.outlet and known_periods.period = here.period
),

missing_outlets as (
    select
        'missing-outlets' as gate,
        gone_outlets.feed,
        gone_outlets.label as subject,
        cast(count(*) filter (where gone_outlets.gone) as double) as measured,
        cast(any_value(limits.missing_outlets) as double) as allowed,
        coalesce(
            'no lines from outlet '
            || string_agg(gone_outlets.outlet, ', ' order by gone_outlets.outlet) filter (where gone_outlets.gone),
            'every outlet of the period before'
        ) as note
    from gone_outlets
    inner join limits on gone_outlets.feed = limits.feed
    group by gone_outlets.feed, gone_outlets.label
),

covered_days as (
    select
        outlet_days.feed,
        outlet_days.outlet,
        outlet_days.day,
        active_deliveries.file,
        row_number() over (
            partition by outlet_days.feed, outlet_days.outlet, outlet_days.day
            order by active_deliveries.arrival
        ) as turn
    from outlet_days
    inner join active_deliveries on outlet_days.delivery = active_deliveries.delivery
),

overlap as (
    select
        'overlap' as gate,
        feed,
        regexp_replace(file, '^.*/', '') as subject,
        cast(count(*) as double) as measured,
        cast(0 as double) as allowed,
        concat(count(*), ' outlet days also covered by an earlier delivery, the first on ', min(day)) as note
    from covered_days
    where turn > 1
    group by feed, file
),

uncovered_days as (
    select
        replaced_days.feed,
        regexp_replace(deliveries.file, '^.*/', '') as subject,
        replaced_days.outlet,
        replaced_days.day
    from replaced_days
    inner join deliveries on replaced_days.delivery = deliveries.delivery
    left join outlet_days
        on replaced_days.feed = outlet_days.feed
        and replaced_days.outlet = outlet_days.outlet
        and replaced_days.day = outlet_days.day
    where deliveries.status = 'superseded' and outlet_days.day is null
),

replacement as (
    select
        'replacement' as gate,
        feed,
        subject,
        cast(count(*) as double) as measured,
        cast(0 as double) as allowed,
        concat(count(*), ' outlet days of a superseded file that no file covers now, the first on ', min(day)) as note
    from uncovered_days
    group by feed, subject
),

measured_gates as (
    select * from refused_share
    union all
    select * from turnover_swing
    union all
    select * from missing_outlets
    union all
    select * from overlap
    union all
    select * from replacement
),

answered as (
    select
        measured_gates.gate,
        measured_gates.feed,
        measured_gates.subject,
        measured_gates.measured,
        measured_gates.allowed as "limit",
        measured_gates.measured > measured_gates.allowed as breached,
        measured_gates.note,
        given_answers.answered_by,
        given_answers.answer
    from measured_gates
    left join given_answers
        on measured_gates.measured > measured_gates.allowed
        and measured_gates.gate = given_answers.gate
        and measured_gates.feed = given_answers.feed
        and measured_gates.subject = given_answers.subject
)

select * from answered
order by gate, feed, subject
