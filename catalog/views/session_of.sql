-- All markets on one session: from session_of('2024-11-05') where nearby = 1.
create macro $database.session_of(day) as table
select *
from $series
where session = cast(day as date);
