-- name: panel
-- meaning: unit value of every product in every period and stratum
-- grain: ea, stratum, product, period
-- reads: sales, products
-- params: first_period, last_period
with counted_sales as (
    select * from sales
    where counted and period between $first_period and $last_period
),

assigned_products as (
    select * from products
    where ea is not null
),

summed as (
    select
        assigned_products.ea,
        counted_sales.stratum,
        assigned_products.product,
        counted_sales.period,
        sum(counted_sales.quantity * cast(assigned_products.units_per_item as decimal(18, 8))) as quantity,
        sum(counted_sales.turnover) as turnover,
        cast(sum(counted_sales.lines) as bigint) as lines
    from counted_sales
    inner join assigned_products
        on counted_sales.feed = assigned_products.feed and counted_sales.item = assigned_products.item
    group by assigned_products.ea, counted_sales.stratum, assigned_products.product, counted_sales.period
),

priced as (
    select
        ea,
        stratum,
        product,
        period,
        case
            when quantity > 0 and turnover > 0 then cast(turnover as double) / cast(quantity as double)
        end as price,
        cast(quantity as decimal(38, 4)) as quantity,
        turnover,
        lines
    from summed
)

select * from priced
order by ea, stratum, product, period
