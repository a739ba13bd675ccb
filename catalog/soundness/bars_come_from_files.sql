-- A bar names a raw file that the snapshot does not list; of a market held back the bars may be older.
select bars.market, bars.file, count(*) as bars
from bars
where bars.file not in (select file from files)
    and bars.market not in (select market from coverage where state = 'held back')
group by bars.market, bars.file;
