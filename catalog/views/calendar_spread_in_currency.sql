-- One contract of the nearer nearby bought and one of the farther sold.
select
    spreads.market, spreads.plan, spreads.nearby, spreads.far_nearby, spreads.session, worth.currency,
    worth.point_value, spreads.spread * worth.point_value as spread_value, spreads.status
from $calendar_spread as spreads
left join (
    select market, any_value(currency) as currency, any_value(point_value) as point_value
    from $terms
    group by market
) as worth on spreads.market = worth.market
