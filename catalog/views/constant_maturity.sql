-- The price 30, 60 and 90 calendar days ahead of each session, on the straight line in time between the contract whose
-- last trading session is the last on or before that day and the one whose is the first on or after it. Only clean
-- settles of that very session count, none is carried, and there is no price beyond the first or last contract. Of
-- contracts with the same last trading session the earliest delivery counts. Linear in time: common practice, no source.
select
    market, session, days, near_contract, far_contract, near_settle, far_settle, far_weight,
    case
        when far_weight = 0 then near_settle
        else (1 - far_weight) * near_settle + far_weight * far_settle
    end as price
from (
    select
        *,
        case
            when near_ahead = far_ahead then cast(0 as double)
            else cast(days - near_ahead as double) / (far_ahead - near_ahead)
        end as far_weight
    from (
        select
            market, session, days,
            max(ahead) filter (where ahead <= days) as near_ahead,
            min(ahead) filter (where ahead >= days) as far_ahead,
            -- One number to sort by: first the day, then the delivery, whose six digits are year and month.
            arg_max(contract, 1000000 * ahead - delivery) filter (where ahead <= days) as near_contract,
            arg_min(contract, 1000000 * ahead + delivery) filter (where ahead >= days) as far_contract,
            arg_max(settle, 1000000 * ahead - delivery) filter (where ahead <= days) as near_settle,
            arg_min(settle, 1000000 * ahead + delivery) filter (where ahead >= days) as far_settle
        from (
            select
                bars.market, bars.session, bars.contract, bars.clean_settle as settle,
                cast(replace(right(bars.contract, 7), '-', '') as bigint) as delivery,
                case
                    when bars.clean_settle is not null and terms.last_trade >= bars.session
                        then terms.last_trade - bars.session
                end as ahead
            from $bars as bars
            left join $terms as terms on bars.market = terms.market and bars.contract = terms.contract
            where bars.status <> 'not a session'
        )
        cross join (values (30), (60), (90)) as maturities(days)
        group by market, session, days
    )
)
