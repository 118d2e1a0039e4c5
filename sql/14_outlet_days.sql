-- name: outlet_days
-- meaning: accepted lines and turnover of one delivery by outlet and day; weekly lines stand on the Thursday
-- grain: delivery, outlet, day
-- reads: lines
-- params: delivery, feed
with accepted_lines as (
    select * from lines
    where accepted
),

summed as (
    select
        $delivery as delivery,
        $feed as feed,
        coalesce(cast(outlet as varchar), '') as outlet,
        day,
        count(*) as lines
    from accepted_lines
    group by all
)

select * from summed
order by delivery, outlet, day
