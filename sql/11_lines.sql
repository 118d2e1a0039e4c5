-- name: lines
-- meaning: every line of one delivery, typed, dated to its period, with the refusal rules it breaks
-- grain: line
-- reads: received, repeats
-- params: period, month_rule, weeks, outlet_mapped, announced_from, announced_until, unit_price_low, unit_price_high, item_code, returns
with received_lines as (
    select * from received
),

repeated_identifiers as (
    select * from repeats
),

typed as (
    select
        received_lines.*,
        coalesce(received_lines.line > repeated_identifiers.first_line, false) as repeated,
        case when not received_lines.broken then try_cast(received_lines.quantity as decimal(18, 4)) end as units,
        case
            when not received_lines.broken then try_cast(received_lines.turnover as decimal(18, 4)) - received_lines.less
        end as amount,
        date_trunc('week', received_lines.day) as monday
    from received_lines
    left join repeated_identifiers on received_lines.line_id = repeated_identifiers.line_id
),

dated as (
    select
        *,
        case $period
            when 'month' then 12 * year(day) + month(day) - 1
            when 'quarter' then 4 * year(day) + quarter(day) - 1
            else cast(floor((day - date '1970-01-05') / 7) as integer)
        end as period_number,
        case $month_rule
            when 'calendar' then true
            else month(monday) = month(monday + interval 6 day)
                and ($month_rule = 'whole-weeks' or (dayofmonth(monday) + 6) // 7 <= $weeks)
        end as counted,
        $returns = 'net' and coalesce(units < 0 and amount < 0, false) as returned
    from typed
),

checked as (
    select
        *,
        not broken and (item is null or sold_given is null or ($outlet_mapped and outlet is null)) as missing_key,
        not broken and sold_given is not null and day is null as unreadable_date,
        coalesce(not isfinite(try_cast(quantity as double)), false)
        or coalesce(not isfinite(try_cast(turnover as double)), false) as non_finite,
        not broken and (units is null or amount is null) as no_number,
        not returned and coalesce(units <= 0, false) as quantity_not_positive,
        not returned and coalesce(amount <= 0, false) as turnover_not_positive,
        coalesce(
            units > 0
            and amount > 0
            and (
                cast(amount as double) / cast(units as double) < $unit_price_low
                or cast(amount as double) / cast(units as double) > $unit_price_high
            ),
            false
        ) as unit_price_limits,
        coalesce(day < $announced_from or day >= $announced_until, false) as outside_announced_period,
        case
            when $item_code <> 'gtin' or item is null then false
            when not regexp_full_match(cast(item as varchar), '[0-9]{8}|[0-9]{12,14}') then true
            else mod(
                    3 * cast(substr(lpad(cast(item as varchar), 14, '0'), 1, 1) as integer)
                    + cast(substr(lpad(cast(item as varchar), 14, '0'), 2, 1) as integer)
                    + 3 * cast(substr(lpad(cast(item as varchar), 14, '0'), 3, 1) as integer)
                    + cast(substr(lpad(cast(item as varchar), 14, '0'), 4, 1) as integer)
                    + 3 * cast(substr(lpad(cast(item as varchar), 14, '0'), 5, 1) as integer)
                    + cast(substr(lpad(cast(item as varchar), 14, '0'), 6, 1) as integer)
                    + 3 * cast(substr(lpad(cast(item as varchar), 14, '0'), 7, 1) as integer)
                    + cast(substr(lpad(cast(item as varchar), 14, '0'), 8, 1) as integer)
                    + 3 * cast(substr(lpad(cast(item as varchar), 14, '0'), 9, 1) as integer)
                    + cast(substr(lpad(cast(item as varchar), 14, '0'), 10, 1) as integer)
                    + 3 * cast(substr(lpad(cast(item as varchar), 14, '0'), 11, 1) as integer)
                    + cast(substr(lpad(cast(item as varchar), 14, '0'), 12, 1) as integer)
                    + 3 * cast(substr(lpad(cast(item as varchar), 14, '0'), 13, 1) as integer)
                    + cast(substr(lpad(cast(item as varchar), 14, '0'), 14, 1) as integer),
                    10
                ) <> 0
        end as malformed_item_code
    from dated
),

judged as (
    select
        *,
        no_number and not non_finite as unreadable_number,
        not(
            broken
            or missing_key
            or unreadable_date
            or non_finite
            or no_number
            or quantity_not_positive
            or turnover_not_positive
            or unit_price_limits
            or outside_announced_period
            or malformed_item_code
            or repeated
        ) as accepted
    from checked
)

select * from judged
