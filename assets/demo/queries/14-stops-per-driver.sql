-- Wanted: stops and runs of each driver since April.
-- The runs are put in order before they are grouped: the order is lost at once and bought for nothing.
with runs as (
    select r.driver_id, r.day, r.stops
    from route_runs r
    where r.day >= date '2026-04-01'
    order by r.driver_id, r.day
)
select runs.driver_id, count(*) as runs, sum(runs.stops) as stops
from runs
group by runs.driver_id
