-- name: marked
-- meaning: the lines of a delivery that has line identifiers or GTINs, marked where one is repeated or malformed
-- grain: line
-- reads: received, repeats, malformed
-- params:
with received_lines as (
    select * from received
),

repeated_identifiers as (
    select * from repeats
),

malformed_items as (
    select * from malformed
),

joined as (
    select
        received_lines.*,
        coalesce(received_lines.line > repeated_identifiers.first_line, false) as repeated,
        malformed_items.item is not null as malformed_item_code
    from received_lines
    left join repeated_identifiers on received_lines.line_id = repeated_identifiers.line_id
    left join malformed_items on received_lines.item = malformed_items.item
)

select * from joined
