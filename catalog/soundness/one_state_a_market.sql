-- A market is both published and held back, or is in a state that does not say why.
select market, string_agg(distinct state, ', ') as states, string_agg(distinct reason, '; ') as reasons
from coverage
group by market
having count(distinct state) <> 1 or bool_or(state is null or state not in ('published', 'held back'))
    or bool_or(state = 'held back' and reason is null)
    or bool_or(state = 'published' and reason is not null and not starts_with(reason, 'gate waived by '));
