-- Wanted: parcels that should have arrived long ago and that nobody has claimed.
-- EXCEPT makes both sides distinct before it compares them, though parcel_id is a key: an anti-join does the same.
select p.parcel_id
from parcels p
where p.delivered_at is null
  and p.promised_at < timestamp '2026-06-01 00:00:00'
except
select c.parcel_id
from claims c
