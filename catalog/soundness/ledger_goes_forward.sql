-- A roll goes back in delivery or in time, or uses what was not known yet.
with steps as (
    select
        *,
        lag(effective_on) over (partition by market, plan, nearby order by effective_on, step) as effective_before
    from rolls
)
select market, plan, nearby, step, decided_on, measured_on, effective_on, effective_before, outgoing, incoming
from steps
where right(incoming, 7) <= right(outgoing, 7)
    or decided_on >= effective_on or measured_on >= effective_on or effective_on <= effective_before
    or weight_after <= weight_before or weight_before < 0 or weight_after > 1 + 1e-9;
