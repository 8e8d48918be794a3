-- Wanted: scans by region and kind.
-- Every single scan is joined to depot, hub and region before it is counted, and the hub is never used.
select g.name as region, s.kind, count(*) as scans
from scans s
join depots d on d.depot_id = s.depot_id
left join depots h on h.depot_id = d.hub_id
join regions g on g.region_id = d.region_id
group by g.name, s.kind
order by region, s.kind
