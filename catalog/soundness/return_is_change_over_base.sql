-- simple_return is not the change over the value the holding had before.
select market, plan, nearby, session, settle, change, simple_return
from series
where settle > 0 and settle - change > 1e-6 * settle
    and (
        simple_return is null
        or abs(simple_return - change / (settle - change)) > 1e-9 * greatest(1, settle / (settle - change))
    )
    or simple_return is not null and (settle is null or settle <= 0 or change is null);
