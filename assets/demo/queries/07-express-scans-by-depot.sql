-- Wanted: scans of express parcels by region and depot.
-- All parcels of all services are joined and grouped first; the service and the region are asked for afterwards.
select t.region_id, t.depot_id, t.scans
from (
    select d.region_id, p.depot_id, p.service, count(*) as scans
    from parcels p
    join scans s on s.parcel_id = p.parcel_id
    join depots d on d.depot_id = p.depot_id
    group by d.region_id, p.depot_id, p.service
    having d.region_id <> 6
) t
where t.service = 'express'
