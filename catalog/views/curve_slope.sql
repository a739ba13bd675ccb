-- How the curve stands between nearby 1 and nearby 2: the roll yield, what the farther contract gains on its way to
-- the nearer one's place if the curve stays as it is, and the slope of the curve's logarithm per year of 365 days.
-- Both formulas: common practice, no source. Time runs in calendar days between the two last trading sessions. In a
-- roll of several steps both price and last trading session are the mix's, which is where a straight curve has it.
select
    market, plan, session, near_contract, far_contract, near_settle, far_settle, days_between,
    case when is_defined then near_settle / far_settle - 1 end as roll_yield,
    ln(case when is_defined then far_settle / near_settle end) * 365 / days_between as annualised_slope,
    status
from (
    select *, coalesce(near_settle > 0 and far_settle > 0 and days_between > 0, false) as is_defined
    from (
        select
            near.market, near.plan, near.session, near.contract as near_contract, far.contract as far_contract,
            near.settle as near_settle, far.settle as far_settle,
            case
                when far.incoming is null then cast(far_out.last_trade - near.session as double)
                else (1 - far.incoming_weight) * (far_out.last_trade - near.session)
                    + far.incoming_weight * (far_in.last_trade - near.session)
            end - case
                when near.incoming is null then cast(near_out.last_trade - near.session as double)
                else (1 - near.incoming_weight) * (near_out.last_trade - near.session)
                    + near.incoming_weight * (near_in.last_trade - near.session)
            end as days_between,
            case
                when far.status is null or 'missing' in (near.status, far.status) then 'missing'
                when 'carried' in (near.status, far.status) then 'carried'
                when 'repaired' in (near.status, far.status) then 'repaired'
                else 'reported'
            end as status
        from (select * from $series where nearby = 1) as near
        left join (select * from $series where nearby = 2) as far
            on near.market = far.market and near.plan = far.plan and near.session = far.session
        -- On near's market, the one a question names: on far's, every market's terms would be read.
        left join $terms as near_out on near.market = near_out.market and near.contract = near_out.contract
        left join $terms as near_in on near.market = near_in.market and near.incoming = near_in.contract
        left join $terms as far_out on near.market = far_out.market and far.contract = far_out.contract
        left join $terms as far_in on near.market = far_in.market and far.incoming = far_in.contract
    )
)
