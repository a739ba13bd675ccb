-- A finding without a proper severity or action, or a correction that was not made.
select finding, market, kind, severity, action, corrected
from findings
where severity is null or severity not in ('note', 'review', 'block')
    or action is null or action not in ('kept', 'repaired', 'masked', 'rejected')
    or action = 'repaired' and corrected is null or action <> 'repaired' and corrected is not null
    or impact_sessions < 0;
