-- name: lines
-- meaning: every line of one delivery, dated to its period; accepted is true where no rule refuses it, else false or null
-- grain: line
-- reads: marked
-- params: period, only_period, month_rule, weeks, outlet_mapped, announced_from, announced_until, unit_price_low, unit_price_high, returns
with marked_lines as (
    select
        *,
        date_trunc('week', day) as monday
    from marked
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
        (
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
            and not repeated
        ) as accepted
    from marked_lines
)

select * from judged
