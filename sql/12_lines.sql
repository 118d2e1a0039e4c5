-- name: lines
-- meaning: every line of one delivery, dated to its period, and whether no rule refuses it
-- grain: line
-- reads: received, repeats, malformed
-- params: period, only_period, month_rule, weeks, outlet_mapped, announced_from, announced_until, unit_price_low, unit_price_high, returns
with received_lines as (
    select * from received
),

repeated_identifiers as (
    select * from repeats
),

malformed_items as (
    select * from malformed
),

dated as (
    select
        received_lines.*,
        malformed_items.item is not null as malformed_item_code,
        coalesce(received_lines.line > repeated_identifiers.first_line, false) as repeated,
        date_trunc('week', received_lines.day) as monday
    from received_lines
    left join repeated_identifiers on received_lines.line_id = repeated_identifiers.line_id
    left join malformed_items on received_lines.item = malformed_items.item
),

judged as (
    select
        *,
        coalesce(
            $only_period,
            case $period
                when 'month' then 12 * year(day) + month(day) - 1
                when 'quarter' then 4 * year(day) + quarter(day) - 1
                else cast(floor((day - date '1970-01-05') / 7) as integer)
            end
        ) as period_number,
        case
            when $month_rule = 'calendar' then true
            else
                month(monday) = month(monday + interval 6 day)
                and ($month_rule = 'whole-weeks' or (dayofmonth(monday) + 6) // 7 <= $weeks)
        end as counted,
        coalesce(
            not broken
            and item is not null
            and (outlet is not null or not $outlet_mapped)
            and not non_finite
            and ((units > 0 and amount > 0) or ($returns = 'net' and units < 0 and amount < 0))
            and ($unit_price_low is null or cast(amount as double) / cast(units as double) >= $unit_price_low)
            and ($unit_price_high is null or cast(amount as double) / cast(units as double) <= $unit_price_high)
            and day is not null
            and ($announced_from is null or day >= $announced_from)
            and ($announced_until is null or day < $announced_until)
            and not malformed_item_code
            and not repeated,
            false
        ) as accepted
    from dated
)

select * from judged
