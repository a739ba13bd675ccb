-- The contracts of one market on one session, nearest delivery first.
create macro $database.curve_of(market_code, day) as table
select contract, settle, clean_settle, status, volume, open_interest
from $bars
where market = market_code and session = cast(day as date)
order by contract;
