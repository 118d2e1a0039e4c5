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

by_item as (
    select
        known_items.feed,
        known_items.item,
        assignments.ea,
        assignments.category is null as any_category,
        assignments.feed is null as any_feed,
        false as any_item
    from known_items
    inner join assignments on known_items.item = assignments.item
    where
        (assignments.feed is null or known_items.feed = assignments.feed)
        and (assignments.category is null or known_items.category = assignments.category)
),

by_category as (
    select
        known_items.feed,
        known_items.item,
        assignments.ea,
        false as any_category,
        assignments.feed is null as any_feed,
        true as any_item
    from known_items
    inner join assignments on known_items.category = assignments.category
    where
        assignments.item is null
        and (assignments.feed is null or known_items.feed = assignments.feed)
),

candidates as (
    select * from by_item
    union all
    select * from by_category
),

ranked as (
    select
        feed,
        item,
        ea,
        row_number() over (
            partition by feed, item
            order by any_item, any_category, any_feed
        ) as preference
    from candidates
),

chosen as (
    select * from ranked
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
