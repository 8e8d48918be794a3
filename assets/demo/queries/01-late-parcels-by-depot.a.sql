-- Wanted: per depot, the late parcels that were scanned and whose recipient was told.
-- As first written: every late parcel meets all its scans times all its notices, and count(distinct) sweeps up.
select p.depot_id, count(distinct p.parcel_id) as late_parcels
from parcels p
join scans s on p.parcel_id = s.parcel_id
join notices n on p.parcel_id = n.parcel_id
where p.delivered_at > p.promised_at
group by p.depot_id
