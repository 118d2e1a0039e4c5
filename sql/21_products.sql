-- name: products
-- meaning: the product of every item, and its elementary aggregate where an assignment names one
-- grain: feed, item
-- reads: items, assignment
-- params:
with known_items as (
    select * from items
),

assignments as (
    select * from assignment
),

candidates as (
    select
        known_items.feed,
        known_items.item,
        assignments.ea,
        row_number() over (
            partition by known_items.feed, known_items.item
            order by
                assignments.item is null,
                assignments.category is null,
                assignments.feed is null
        ) as preference
    from known_items
    inner join assignments
        on (assignments.feed is null or known_items.feed = assignments.feed)
        and (assignments.item is null or known_items.item = assignments.item)
        and (assignments.category is null or known_items.category = assignments.category)
        and (assignments.item is not null or assignments.category is not null)
),

chosen as (
    select * from candidates
    where preference = 1
),

joined as (
    select
        known_items.feed,
        known_items.item,
        concat(known_items.feed, '/', known_items.item) as product,
        chosen.ea,
        cast(1 as double) as units_per_item
    from known_items
    left join chosen on known_items.feed = chosen.feed and known_items.item = chosen.item
)

select * from joined
order by feed, item
