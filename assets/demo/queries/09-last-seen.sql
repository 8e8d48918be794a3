-- Wanted: for every parcel that is not delivered, when and how often it was seen.
-- Two scalar subqueries are answered anew for every parcel, over the same scans.
select
    p.parcel_id,
    p.promised_at,
    (select max(s.scanned_at) from scans s where s.parcel_id = p.parcel_id) as last_seen,
    (select count(*) from scans s where s.parcel_id = p.parcel_id) as times_seen
from parcels p
where p.delivered_at is null
