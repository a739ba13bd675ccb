-- The back-adjusted price changed by something else than the held position did.
with moves as (
    select
        market, plan, nearby, session, change, back_adjusted,
        lag(back_adjusted) over (partition by market, plan, nearby order by session) as before
    from series
    where back_adjusted is not null
)
select market, plan, nearby, session, change, back_adjusted - before as back_adjusted_change
from moves
where before is not null
    and (change is null or abs(back_adjusted - before - change) > 1e-9 * greatest(1, abs(back_adjusted), abs(before)));
