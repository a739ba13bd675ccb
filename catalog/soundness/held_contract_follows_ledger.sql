-- A series holds something else than the ledger says.
with sides as (
    select
        series.market, series.plan, series.nearby, series.session, series.contract, series.incoming,
        series.incoming_weight, past.weight_after, past.outgoing, past.incoming as arrived
    from series asof left join rolls as past
        on series.market = past.market and series.plan = past.plan and series.nearby = past.nearby
        and series.session >= past.effective_on
),
both_ways as (
    select sides.*, next.outgoing as leaves_next
    from sides asof left join rolls as next
        on sides.market = next.market and sides.plan = next.plan and sides.nearby = next.nearby
        and sides.session < next.effective_on
)
select market, plan, nearby, session, contract, incoming, incoming_weight, outgoing, arrived, weight_after, leaves_next
from both_ways
where weight_after is null and (contract <> leaves_next or incoming is not null or incoming_weight <> 0)
    or weight_after > 1 - 1e-9 and (contract <> arrived or incoming is not null or incoming_weight <> 0)
    or weight_after <= 1 - 1e-9 and (
        contract <> outgoing or incoming is distinct from arrived or abs(incoming_weight - weight_after) > 1e-9
    );
