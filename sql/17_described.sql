-- name: described
-- meaning: what the lines of one delivery say about their items, where the feed maps such columns
-- grain: delivery, item
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
        trim(cast(item as varchar), e' \t\r') as item,
        max(description) as description,
        max(brand) as brand,
        max(size) as size,
        max(category) as category
    from accepted_lines
    group by trim(cast(item as varchar), e' \t\r')
)

select * from summed
order by delivery, item
