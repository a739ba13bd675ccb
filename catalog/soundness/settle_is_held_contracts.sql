-- A settle is not that of the held contracts' bars.
with legs as (
    select
        series.market, series.plan, series.nearby, series.session, series.contract, series.incoming,
        series.settle, first.clean_settle as outgoing_settle, second.clean_settle as incoming_settle,
        case
            when series.incoming is null then first.clean_settle
            else (1 - series.incoming_weight) * first.clean_settle + series.incoming_weight * second.clean_settle
        end as held
    from series
    left join bars as first
        on series.market = first.market and series.contract = first.contract and series.session = first.session
    left join bars as second
        on series.market = second.market and series.incoming = second.contract and series.session = second.session
    where series.status in ('reported', 'repaired')
)
select market, plan, nearby, session, contract, incoming, settle, outgoing_settle, incoming_settle
from legs
where held is null or settle is null or abs(settle - held) > 1e-9 * greatest(1, abs(outgoing_settle), abs(held));
