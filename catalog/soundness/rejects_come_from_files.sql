-- A rejected row names a raw file that the snapshot does not list.
select file, count(*) as rejects
from rejects
where file not in (select file from files)
group by file;
