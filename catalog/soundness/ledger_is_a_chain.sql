-- A roll does not leave from where the one before it arrived.
with steps as (
    select *, row_number() over place as number, lag(outgoing) over place as outgoing_before,
        lag(incoming) over place as incoming_before, lag(weight_after) over place as weight
    from rolls
    window place as (partition by market, plan, nearby order by effective_on, step)
)
select market, plan, nearby, effective_on, step, outgoing, incoming, weight_before, incoming_before, weight
from steps
where number = 1 and weight_before > 1e-9
    or weight > 1 - 1e-9 and (outgoing <> incoming_before or weight_before > 1e-9)
    or weight <= 1 - 1e-9 and (
        outgoing <> outgoing_before or abs(weight_before - weight) > 1e-9
        or incoming <> incoming_before and measured_on is not null
    );
