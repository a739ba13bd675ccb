-- Where one price comes from: from price_trace('NWHT', 'by_open_interest', 1, '2024-03-01').
-- The published row, its legs with their raw rows and findings, and every later roll with what it adds.
create macro $database.price_trace(market_code, plan_name, nearby_number, day) as table
with held as (
    select *
    from $series
    where market = market_code and plan = plan_name and nearby = nearby_number and session = cast(day as date)
),
legs as (
    select 1 as place, contract, 1 - incoming_weight as weight from held
    union all
    select 2 as place, incoming as contract, incoming_weight as weight from held where incoming is not null
),
priced as (
    -- A carried price comes from an earlier session of the same contract.
    select bar.*
    from $bars as bar
    where
        bar.market = market_code
        and bar.session <= cast(day as date)
        and bar.clean_settle is not null
        and bar.status <> 'not a session'
        and bar.contract in (select contract from legs)
    qualify row_number() over (partition by bar.contract order by bar.session desc) = 1
),
used as (
    select legs.place, legs.contract, legs.weight, priced.session, priced.settle as reported,
        priced.clean_settle, priced.status, priced.file, priced.line
    from legs
    left join priced on priced.contract = legs.contract
),
later as (
    select *
    from $rolls
    where market = market_code and plan = plan_name and nearby = nearby_number and effective_on > cast(day as date)
),
told as (
    select 10 as part_order, place, 'leg' as part, session as on_session, contract, weight, clean_settle as value,
        status as says
    from used
    union all
    select 11, place, 'reported settle', session, contract, null, reported,
        'SHA-256 ' || file || ', line ' || cast(line as varchar)
    from used
    union all
    select 12, place, 'raw file', used.session, used.contract, null, null, held_files.path
    from used
    join $files as held_files on held_files.file = used.file
    union all
    select 13, used.place, 'finding', found.session, found.contract, null, found.corrected, found.message
    from used
    join $findings as found on found.contract = used.contract
        and found.session in (used.session, cast(day as date))
        and found.market = market_code
    union all
    select 20, 0, 'settle', session, contract, null, settle, 'sum of weight x value of the legs' from held
    union all
    select 30, row_number() over (order by effective_on, step), 'later roll', effective_on,
        outgoing || ' -> ' || incoming, ratio, gap,
        'measured ' || coalesce(cast(measured_on as varchar), 'never') || ': '
        || coalesce(cast(incoming_settle as varchar), 'none') || ' - ' || coalesce(cast(outgoing_settle as varchar), 'none')
        || case
            when weight_after - weight_before = 1 then ''
            else ', x ' || cast(weight_after - weight_before as varchar)
        end
        || ' (' || trigger || ', decided ' || cast(decided_on as varchar) || ')'
    from later
    union all
    select 40, 0, 'shift', session, null, null, shift, 'sum of the values of the later rolls' from held
    union all
    select 41, 0, 'scale', session, null, null, scale, 'product of the weights of the later rolls' from held
    union all
    select 50, 0, 'back_adjusted', session, null, null, back_adjusted, 'settle + shift' from held
    union all
    select 51, 0, 'ratio_adjusted', session, null, null, ratio_adjusted, 'settle x scale' from held
    union all
    select 60, 0, 'snapshot', null, null, null, null, $about from held
)
select part, on_session as session, contract, weight, value, says
from told
order by part_order, place, on_session;
