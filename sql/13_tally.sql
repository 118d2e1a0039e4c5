-- name: tally
-- meaning: exact sums of the lines of one delivery; the sums of refused lines serve to check the books
-- grain: accepted, delivery, period, counted, stratum, item
-- reads: lines
-- params: delivery, feed, period
with judged_lines as (
    select * from lines
),

summed as (
    select
        accepted,
        period_number,
        counted,
        stratum,
        item,
        sum(units) as quantity,
        sum(amount) as turnover,
        count(*) as line_count
    from judged_lines
    group by accepted, period_number, counted, stratum, item
),

dated as (
    select
        accepted,
        $delivery as delivery,
        $feed as feed,
        case $period
            when 'month' then make_date(period_number // 12, period_number % 12 + 1, 1)
            when 'quarter' then make_date(period_number // 4, 3 * (period_number % 4) + 1, 1)
            else date '1970-01-05' + cast(7 * period_number as integer)
        end as period,
        counted,
        stratum,
        cast(item as varchar) as item,
        quantity,
        turnover,
        line_count as lines
    from summed
)

select * from dated
order by accepted, delivery, period, counted, stratum, item
