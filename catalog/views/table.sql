-- One published table, all markets together.
create view $database.$name as
select $columns
from $source;
