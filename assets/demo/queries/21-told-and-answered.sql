-- Wanted: for every parcel, the notices by text and mail against the answers of the carriers.
-- NULL never equals NULL: the announcements and their answers do not meet, and stand on two rows of their own.
select coalesce(told.parcel_ref, heard.parcel_ref) as parcel_ref, told.notices, heard.answers
from (
    select cast(n.parcel_id as varchar) as parcel_ref, count(*) as notices
    from notices n
    where n.channel in ('text', 'mail')
    group by n.parcel_id
) told
full join (
    select f.parcel_ref, count(*) as answers
    from notice_feed f
    group by f.parcel_ref
) heard on heard.parcel_ref = told.parcel_ref
