-- back_adjusted is not settle + shift, or is there where one of them is not.
select market, plan, nearby, session, settle, shift, back_adjusted
from series
where (back_adjusted is null) <> (settle is null or shift is null)
    or abs(back_adjusted - (settle + shift)) > 1e-9 * greatest(1, abs(settle), abs(shift));
