-- A roll was measured at a settle that is not its contract's clean one on that session.
with legs as (
    select market, plan, nearby, effective_on, step, measured_on, outgoing as contract, outgoing_settle as settle
    from rolls where measured_on is not null
    union all
    select market, plan, nearby, effective_on, step, measured_on, incoming, incoming_settle
    from rolls where measured_on is not null
)
select legs.*, bars.clean_settle
from legs left join bars
    on legs.market = bars.market and legs.contract = bars.contract and legs.measured_on = bars.session
where bars.clean_settle is distinct from legs.settle;
