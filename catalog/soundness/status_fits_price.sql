-- A status says something else than the price beside it.
select 'series' as "table", market, concat_ws(' ', plan, nearby) as of, session, status, settle as price
from series
where status not in ('reported', 'repaired', 'carried', 'missing')
    or status is null or (status = 'missing') <> (settle is null)
union all
select 'bars', market, contract, session, status, clean_settle
from bars
where status not in ('reported', 'repaired', 'masked', 'not a session')
    or status is null or status = 'repaired' and clean_settle is null
    or status in ('masked', 'not a session') and clean_settle is not null
    or status = 'reported' and (settle is null) <> (clean_settle is null);
