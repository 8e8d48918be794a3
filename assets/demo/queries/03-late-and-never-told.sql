-- Wanted: late parcels whose recipient got no notice at all.
-- The list in NOT IN holds NULLs (announcements to everybody), so the answer is always empty.
select p.parcel_id, p.barcode, p.depot_id
from parcels p
where p.delivered_at > p.promised_at
  and p.parcel_id not in (select n.parcel_id from notices n)
