-- Wanted: every route with its number of runs in March, those without a run too.
-- As first written: the runs are counted anew for every route.
select r.route_id, (
    select count(*)
    from route_runs u
    where u.route_id = r.route_id
      and u.day between date '2026-03-01' and date '2026-03-31'
) as runs
from routes r
