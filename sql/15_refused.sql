-- name: refused
-- meaning: refused lines of one delivery with the rule each breaks first, any others, and the raw row
-- grain: delivery, line
-- reads: lines
-- params: delivery, feed, outlet_mapped, announced_from, announced_until, unit_price_low, unit_price_high, returns
with refused_lines as (
    select
        *,
        cast(amount as double) / cast(units as double) as unit_price,
        $returns = 'net' and coalesce(units < 0 and amount < 0, false) as returned
    from lines
    where accepted is not true
),

named as (
    select
        *,
        list_filter(
            [
                case when broken then 'broken-row' end,
                case
                    when not broken and (item is null or sold_given is null or ($outlet_mapped and outlet is null))
                        then 'missing-key'
                end,
                case when not broken and sold_given is not null and day is null then 'unreadable-date' end,
                case
                    when not broken and not non_finite and (units is null or amount is null) then 'unreadable-number'
                end,
                case when not broken and non_finite then 'non-finite' end,
                case when not returned and units <= 0 then 'quantity-not-positive' end,
                case when not returned and amount <= 0 then 'turnover-not-positive' end,
                case
                    when (returned or (units > 0 and amount > 0)) and (unit_price < $unit_price_low or unit_price > $unit_price_high)
                        then 'unit-price-limits'
                end,
                case when day < $announced_from or day >= $announced_until then 'outside-announced-period' end,
                case when malformed_item_code then 'malformed-item-code' end,
                case when repeated then 'duplicate-line' end
            ],
            lambda rule: rule is not null
        ) as rules
    from refused_lines
),

explained as (
    select
        $delivery as delivery,
        $feed as feed,
        cast(line as bigint) as line,
        rules[1] as rule,
        array_to_string(rules[2:], ', ') as also,
        case rules[1]
            when 'broken-row' then 'the number of cells is not that of the header, or a quote is not closed'
            when 'missing-key'
                then concat_ws(
                        ', ',
                        case when item is null then 'no item' end,
                        case when sold_given is null then 'no date' end,
                        case when $outlet_mapped and outlet is null then 'no outlet' end
                    )
            when 'unreadable-date' then concat('date ', sold_given)
            when 'unit-price-limits' then concat('unit price ', round(unit_price, 4))
            when 'outside-announced-period' then concat('day ', day)
            when 'malformed-item-code' then concat('item ', item)
            when 'duplicate-line' then concat('line id ', line_id)
            else concat(
                    'quantity ', coalesce(cast(quantity_given as varchar), 'empty'),
                    ', turnover ', coalesce(cast(turnover_given as varchar), 'empty')
                )
        end as detail,
        amount as turnover,
        case when typeof(raw) = 'VARCHAR' then cast(raw as varchar) else cast(to_json(raw) as varchar) end as raw
    from named
)

select * from explained
order by delivery, line
