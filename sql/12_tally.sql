-- name: tally
-- meaning: exact sums of one delivery in one pass: accepted lines by item, and all refused lines as one row
-- grain: accepted, period, counted, stratum, item
-- reads: lines
-- params: delivery, feed, period
with judged_lines as (
    select
        accepted,
        case when accepted then period_number end as period_number,
        case when accepted then counted end as counted,
        case when accepted then stratum end as stratum,
        case when accepted then item end as item,
        units,
        amount
    from lines
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
order by accepted, period, counted, stratum, item
