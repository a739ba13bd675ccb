-- The ratio-adjusted price returned something else than the held position did.
with moves as (
    select
        market, plan, nearby, session, simple_return, settle, ratio_adjusted,
        lag(ratio_adjusted) over (partition by market, plan, nearby order by session) as before
    from series
    where settle is not null
)
select market, plan, nearby, session, simple_return, ratio_adjusted / before - 1 as ratio_adjusted_return
from moves
where before > 0 and ratio_adjusted > 0
    and (
        simple_return is null
        or abs(ratio_adjusted / before - 1 - simple_return) > 1e-9 * greatest(1, ratio_adjusted / before)
    );
