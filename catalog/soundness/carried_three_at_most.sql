-- A settle of one contract is carried for a fourth session.
with rows as (
    select
        market, plan, nearby, session, contract, settle, incoming,
        count(*) filter (status = 'carried' and incoming is null) over recent as carried,
        count(distinct contract) over recent as contracts
    from series
    window recent as (
        partition by market, plan, nearby order by session rows between 3 preceding and current row
    )
)
select market, plan, nearby, session, contract, settle
from rows
where carried = 4 and contracts = 1;
