-- gap or ratio does not follow from the weights and the two settles.
with measured as (
    select
        *,
        (weight_after - weight_before) * (incoming_settle - outgoing_settle) as gap_of_settles,
        (1 - weight_before) * outgoing_settle + weight_before * incoming_settle as mix_before,
        (1 - weight_after) * outgoing_settle + weight_after * incoming_settle as mix_after,
        outgoing_settle > 0 and incoming_settle > 0 as has_ratio
    from rolls
)
select market, plan, nearby, effective_on, step, gap, gap_of_settles, ratio, mix_after / mix_before as ratio_of_settles
from measured
where (gap is null) <> (measured_on is null) or (outgoing_settle is null) <> (measured_on is null)
    or (incoming_settle is null) <> (measured_on is null)
    or abs(gap - gap_of_settles) > 1e-9 * greatest(1, abs(outgoing_settle), abs(incoming_settle))
    or (ratio is null) = coalesce(has_ratio, false)
    or has_ratio and abs(ratio - mix_after / mix_before) > 1e-9 * greatest(1, abs(ratio));
