-- A session is marked as rolled without a roll in the ledger, or the other way round.
select
    coalesce(series.market, rolls.market) as market, coalesce(series.plan, rolls.plan) as plan,
    coalesce(series.nearby, rolls.nearby) as nearby, coalesce(series.session, rolls.effective_on) as session,
    series.rolled, rolls.outgoing
from series full join rolls
    on series.market = rolls.market and series.plan = rolls.plan and series.nearby = rolls.nearby
    and series.session = rolls.effective_on
where coalesce(series.rolled, false) <> (rolls.outgoing is not null);
