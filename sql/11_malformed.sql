-- name: malformed
-- meaning: item codes of one delivery that are no GTIN-8, -12, -13 or -14 with a right check digit
-- grain: item
-- reads: received
-- params:
-- source: GS1 General Specifications, check digit: weights 3 and 1 in turn over the code padded to 14 digits
with given_items as (
    select distinct item
    from received
    where item is not null
),

padded as (
    select
        item,
        regexp_full_match(trim(cast(item as varchar), e' \t\r'), '[0-9]{8}|[0-9]{12,14}') as well_formed,
        lpad(trim(cast(item as varchar), e' \t\r'), 14, '0') as digits
    from given_items
),

failed as (
    select item
    from padded
    where
        not well_formed
        or mod(
            3 * try_cast(substr(digits, 1, 1) as integer)
            + try_cast(substr(digits, 2, 1) as integer)
            + 3 * try_cast(substr(digits, 3, 1) as integer)
            + try_cast(substr(digits, 4, 1) as integer)
            + 3 * try_cast(substr(digits, 5, 1) as integer)
            + try_cast(substr(digits, 6, 1) as integer)
            + 3 * try_cast(substr(digits, 7, 1) as integer)
            + try_cast(substr(digits, 8, 1) as integer)
            + 3 * try_cast(substr(digits, 9, 1) as integer)
            + try_cast(substr(digits, 10, 1) as integer)
            + 3 * try_cast(substr(digits, 11, 1) as integer)
            + try_cast(substr(digits, 12, 1) as integer)
            + 3 * try_cast(substr(digits, 13, 1) as integer)
            + try_cast(substr(digits, 14, 1) as integer),
            10
        ) <> 0
)

select * from failed
order by item
