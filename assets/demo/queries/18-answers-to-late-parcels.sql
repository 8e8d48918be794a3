-- Wanted: what came back on the notices for late parcels.
-- The feed names parcels by text, so the key is cast row by row; and repeated deliveries of one answer count again.
select f.channel, f.answer, count(*) as answers
from notice_feed f
join parcels p on f.parcel_ref = cast(p.parcel_id as varchar)
where p.delivered_at > p.promised_at
group by f.channel, f.answer
