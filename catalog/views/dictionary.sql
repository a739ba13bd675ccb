-- What every column of every table means; filled from the definitions the tables are made of.
create table $database.dictionary (
    "table" varchar not null,
    "column" varchar not null,
    "type" varchar not null,
    unit varchar not null,
    meaning varchar not null,
    table_meaning varchar not null
);
