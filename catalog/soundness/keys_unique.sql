-- Two rows of a table have the same key.
select 'bars' as "table", concat_ws(' ', market, contract, session) as "key", count(*) as rows
from bars group by market, contract, session having count(*) > 1
union all
select 'series', concat_ws(' ', market, plan, nearby, session), count(*)
from series group by market, plan, nearby, session having count(*) > 1
union all
select 'rolls', concat_ws(' ', market, plan, nearby, effective_on, step), count(*)
from rolls group by market, plan, nearby, effective_on, step having count(*) > 1
union all
select 'findings', finding, count(*)
from findings group by finding having count(*) > 1
union all
select 'rejects', concat_ws(' ', file, line), count(*)
from rejects group by file, line having count(*) > 1
union all
select 'files', concat_ws(' ', path, file), count(*)
from files group by path, file having count(*) > 1
union all
select 'coverage', concat_ws(' ', market, plan), count(*)
from coverage group by market, plan having count(*) > 1
union all
select 'terms', concat_ws(' ', market, contract), count(*)
from terms group by market, contract having count(*) > 1
union all
select 'runs', cast(run as varchar), count(*)
from runs group by run having count(*) > 1;
