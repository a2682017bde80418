-- purpose: name the tables of the file, to tell an empty one and a foreign one from a store
-- grain:   one row per table
-- params:  none
-- reads:   duckdb_tables(); writes: nothing
select table_name
from duckdb_tables()
where not internal
order by table_name
