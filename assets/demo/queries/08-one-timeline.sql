-- Wanted: everything that happened to the parcels, scans and notices in one list.
-- UNION compares all rows to drop duplicates, though each row holds its key and its kind and none can occur.
select 'scan' as what, s.scan_id as number, s.parcel_id, s.scanned_at as happened_at
from scans s
union
select 'notice' as what, n.notice_id, n.parcel_id, n.sent_at
from notices n
where n.parcel_id is not null
