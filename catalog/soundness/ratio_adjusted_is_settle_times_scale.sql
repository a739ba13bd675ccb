-- ratio_adjusted is not settle x scale, or is there where one of them is not.
select market, plan, nearby, session, settle, scale, ratio_adjusted
from series
where (ratio_adjusted is null) <> (settle is null or scale is null)
    or abs(ratio_adjusted - settle * scale) > 1e-9 * greatest(1, abs(settle * scale));
