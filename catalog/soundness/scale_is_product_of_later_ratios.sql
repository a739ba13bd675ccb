-- scale is not the product of the ratios of the rolls that take effect later.
with later as (
    select
        market, plan, nearby, effective_on,
        product(ratio) over rest as total, bool_or(ratio is null) over rest as is_cut
    from rolls
    window rest as (
        partition by market, plan, nearby order by effective_on desc, step desc
        rows between unbounded preceding and current row
    )
),
expected as (
    select
        series.market, series.plan, series.nearby, series.session, series.scale,
        case when later.is_cut then null else coalesce(later.total, 1) end as ratios
    from series asof left join later
        on series.market = later.market and series.plan = later.plan and series.nearby = later.nearby
        and series.session < later.effective_on
)
select market, plan, nearby, session, scale, ratios
from expected
where (scale is null) <> (ratios is null) or abs(scale - ratios) > 1e-9 * greatest(1, abs(ratios));
