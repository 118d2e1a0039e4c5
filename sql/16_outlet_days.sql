-- name: outlet_days
-- meaning: lines of one delivery by outlet and day within the announced period; weekly lines stand on the Thursday
-- grain: delivery, outlet, day
-- reads: received
-- params: delivery, feed, outlet_mapped, announced_from, announced_until
with dated_lines as (
    select
        outlet,
        day
    from received
    where
        day is not null
        and (outlet is not null or not $outlet_mapped)
        and ($announced_from is null or day >= $announced_from)
        and ($announced_until is null or day < $announced_until)
),

counted as (
    select
        outlet,
        day,
        count(*) as line_count
    from dated_lines
    group by outlet, day
),

named as (
    select
        $delivery as delivery,
        $feed as feed,
        coalesce(cast(outlet as varchar), '') as outlet,
        day,
        line_count as lines
    from counted
)

select * from named
order by delivery, outlet, day
