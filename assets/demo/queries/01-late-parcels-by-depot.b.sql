-- Wanted: per depot, the late parcels that were scanned and whose recipient was told.
-- Proposed instead: ask only whether a scan and a notice exist, then count parcels.
select p.depot_id, count(*) as late_parcels
from parcels p
where p.delivered_at > p.promised_at
  and exists (select 1 from scans s where s.parcel_id = p.parcel_id)
  and exists (select 1 from notices n where n.parcel_id = p.parcel_id)
group by p.depot_id
