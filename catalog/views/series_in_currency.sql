-- Point values are for the present scale of prices, and so are all prices of series; those of bars, as reported, may
-- be older and are not to be had in currency here.
select
    series.market, series.plan, series.nearby, series.session, worth.currency, worth.point_value,
    series.change * worth.point_value as change_value,
    series.back_adjusted * worth.point_value as back_adjusted_value,
    series.status
from $series as series
left join (
    select market, any_value(currency) as currency, any_value(point_value) as point_value
    from $terms
    group by market
) as worth on series.market = worth.market
