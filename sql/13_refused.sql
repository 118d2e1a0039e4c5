-- name: refused
-- meaning: refused lines of one delivery with the rule each breaks first, any others, and the raw row
-- grain: delivery, line
-- reads: lines
-- params: delivery, feed
with refused_lines as (
    select * from lines
    where not accepted
),

named as (
    select
        *,
        list_filter(
            [
                case when broken then 'broken-row' end,
                case when missing_key then 'missing-key' end,
                case when unreadable_date then 'unreadable-date' end,
                case when unreadable_number then 'unreadable-number' end,
                case when non_finite then 'non-finite' end,
                case when quantity_not_positive then 'quantity-not-positive' end,
                case when turnover_not_positive then 'turnover-not-positive' end,
                case when unit_price_limits then 'unit-price-limits' end,
                case when outside_announced_period then 'outside-announced-period' end,
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
                        case when outlet is null then 'no outlet' end
                    )
            when 'unreadable-date' then concat('date ', sold_given)
            when 'unreadable-number' then concat('quantity ', coalesce(quantity_given, 'empty'), ', turnover ', coalesce(turnover_given, 'empty'))
            when 'non-finite' then concat('quantity ', quantity_given, ', turnover ', turnover_given)
            when 'quantity-not-positive' then concat('quantity ', quantity_given, ', turnover ', turnover_given)
            when 'turnover-not-positive' then concat('quantity ', quantity_given, ', turnover ', turnover_given)
            when 'unit-price-limits' then concat('unit price ', round(cast(amount as double) / cast(units as double), 4))
            when 'outside-announced-period' then concat('day ', day)
            when 'malformed-item-code' then concat('item ', item)
            when 'duplicate-line' then concat('line id ', line_id)
        end as detail,
        amount as turnover,
        cast(raw as varchar) as raw
    from named
)

select * from explained
order by delivery, line
