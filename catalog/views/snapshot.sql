-- The one snapshot this catalog shows, and the folder its files were in when the catalog was built.
create table $database.snapshot (
    name varchar not null,
    "sequence" bigint not null,
    parent varchar,
    desk varchar not null,
    code varchar not null,
    folder varchar not null
);
