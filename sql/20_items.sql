-- name: items
-- meaning: every item of the active deliveries with the master's words for it, or its lines' where the master has none
-- grain: feed, item
-- reads: sales, described, masters
-- params:
with sold_items as (
    select
        feed,
        item,
        min(period) as first_period,
        max(period) as last_period,
        cast(sum(lines) as bigint) as lines,
        sum(turnover) as turnover
    from sales
    group by feed, item
),

told_items as (
    select
        feed,
        item,
        max(description) as description,
        max(brand) as brand,
        max(size) as size,
        max(category) as category
    from described
    group by feed, item
),

known_items as (
    select * from masters
),

joined as (
    select
        sold_items.feed,
        sold_items.item,
        coalesce(known_items.description, told_items.description) as description,
        coalesce(known_items.brand, told_items.brand) as brand,
        coalesce(known_items.size, told_items.size) as size,
        coalesce(known_items.category, told_items.category) as category,
        known_items.attributes,
        sold_items.first_period,
        sold_items.last_period,
        sold_items.lines,
        sold_items.turnover
    from sold_items
    left join known_items on sold_items.feed = known_items.feed and sold_items.item = known_items.item
    left join told_items on sold_items.feed = told_items.feed and sold_items.item = told_items.item
)

select * from joined
order by feed, item
