-- Every plan and nearby of one market: from series_of('NWHT') where plan = 'by_volume' and nearby = 1.
create macro $database.series_of(market_code) as table
select *
from $series
where market = market_code;
