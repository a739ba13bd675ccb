-- shift is not the sum of the gaps of the rolls that take effect later.
with later as (
    select
        market, plan, nearby, effective_on,
        fsum(gap) over rest as total, sum(abs(gap)) over rest as size, bool_or(gap is null) over rest as is_cut
    from rolls
    window rest as (
        partition by market, plan, nearby order by effective_on desc, step desc
        rows between unbounded preceding and current row
    )
),
expected as (
    select
        series.market, series.plan, series.nearby, series.session, series.shift,
        case when later.is_cut then null else coalesce(later.total, 0) end as gaps, coalesce(later.size, 0) as size
    from series asof left join later
        on series.market = later.market and series.plan = later.plan and series.nearby = later.nearby
        and series.session < later.effective_on
)
select market, plan, nearby, session, shift, gaps
from expected
where (shift is null) <> (gaps is null) or abs(shift - gaps) > 1e-9 * greatest(1, size);
