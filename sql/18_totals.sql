-- name: totals
-- meaning: what one delivery holds, summed over all of its lines without regard to rules
-- grain: delivery
-- reads: received
-- params: delivery
with summed as (
    select
        $delivery as delivery,
        count(*) as lines,
        coalesce(sum(amount), 0) as turnover
    from received
)

select * from summed
order by delivery
