-- Wanted: depots that are late more often than their region.
-- The late parcels are found and joined twice, once for the depots and once for the regions.
select here.region_id, here.depot_id, here.late_parcels, there.late_parcels as of_region
from (
    select d.region_id, d.depot_id, count(*) as late_parcels
    from parcels p
    join depots d on d.depot_id = p.depot_id
    where p.delivered_at > p.promised_at
    group by d.region_id, d.depot_id
) here
join (
    select d.region_id, count(*) as late_parcels
    from parcels p
    join depots d on d.depot_id = p.depot_id
    where p.delivered_at > p.promised_at
    group by d.region_id
) there on there.region_id = here.region_id
where here.late_parcels * 12 > there.late_parcels
