-- growth does not begin at 100, or does not compound simple_return.
with steps as (
    select
        market, plan, nearby, session, simple_return, growth,
        lag(growth) over (partition by market, plan, nearby order by session) as before
    from series
    where settle is not null
)
select market, plan, nearby, session, simple_return, before, growth
from steps
where growth is not null and before is null and abs(growth - 100) > 1e-9
    or before is not null and (
        growth is null or simple_return is null
        or abs(growth - before * (1 + simple_return)) > 1e-9 * greatest(1, abs(growth))
    );
