-- name: sales
-- meaning: exact sums of the accepted lines of one delivery
-- grain: delivery, period, counted, stratum, item
-- reads: lines
-- params: delivery, feed, period
with accepted_lines as (
    select * from lines
    where accepted
),

summed as (
    select
        period_number,
        counted,
        stratum,
        item,
        sum(units) as quantity,
        sum(amount) as turnover,
        count(*) as line_count
    from accepted_lines
    group by period_number, counted, stratum, item
),

dated as (
    select
        $delivery as delivery,
        $feed as feed,
        case $period
            when 'month' then make_date(period_number // 12, period_number % 12 + 1, 1)
            when 'quarter' then make_date(period_number // 4, 3 * (period_number % 4) + 1, 1)
            else date '1970-01-05' + cast(7 * period_number as integer)
        end as period,
        counted,
        stratum,
        trim(cast(item as varchar), e' \t\r') as item,
        quantity,
        turnover,
        line_count
    from summed
),

trimmed as (
    select
        delivery,
        feed,
        period,
        counted,
        stratum,
        item,
        sum(quantity) as quantity,
        sum(turnover) as turnover,
        cast(sum(line_count) as bigint) as lines
    from dated
    group by delivery, feed, period, counted, stratum, item
)

select * from trimmed
order by delivery, period, counted, stratum, item
