-- name: repeats
-- meaning: identifiers of more than one readable line of one delivery, and where each occurs first
-- grain: line_id
-- reads: received
-- params:
with identified_lines as (
    select
        line_id,
        line
    from received
    where
        line_id is not null
        and not broken
        and item is not null
        and day is not null
        and units is not null
        and amount is not null
),

counted as (
    select
        line_id,
        min(line) as first_line
    from identified_lines
    group by line_id
    having count(*) > 1
)

select * from counted
order by line_id
