-- The coverage of a published plan is not what its first nearby's series says.
with counted as (
    select
        market, plan, min(session) as first_session, max(session) as last_session, count(*) as sessions,
        count(*) filter (status = 'repaired') as repaired, count(*) filter (status = 'carried') as carried,
        count(*) filter (status = 'missing') as missing
    from series
    where nearby = 1
    group by market, plan
)
select market, plan, coverage.sessions, counted.sessions as counted, coverage.last_session
from counted full join coverage using (market, plan)
where coverage.state is null
    or coverage.state = 'published' and (
        coverage.first_session is distinct from counted.first_session
        or coverage.last_session is distinct from counted.last_session
        or coalesce(coverage.sessions, 0) <> coalesce(counted.sessions, 0)
        or coalesce(coverage.repaired, 0) <> coalesce(counted.repaired, 0)
        or coalesce(coverage.carried, 0) <> coalesce(counted.carried, 0)
        or coalesce(coverage.missing, 0) <> coalesce(counted.missing, 0)
    );
