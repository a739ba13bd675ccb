-- The nearer nearby's settle less the farther one's: what the held contracts themselves trade at, nothing adjusted.
-- A contract against itself, for as long as one nearby has rolled and the other still waits, is no spread.
select
    near.market, near.plan, near.nearby, far.nearby as far_nearby, near.session,
    near.contract as near_contract, far.contract as far_contract, near.settle as near_settle, far.settle as far_settle,
    case
        when near.contract = far.contract and near.incoming is not distinct from far.incoming
            and near.incoming_weight = far.incoming_weight then null
        else near.settle - far.settle
    end as spread,
    case
        when 'missing' in (near.status, far.status) then 'missing'
        when 'carried' in (near.status, far.status) then 'carried'
        when 'repaired' in (near.status, far.status) then 'repaired'
        else 'reported'
    end as status
from $series as near
join $series as far
    on near.market = far.market and near.plan = far.plan and near.session = far.session and near.nearby < far.nearby
