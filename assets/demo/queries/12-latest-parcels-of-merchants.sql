-- Wanted: each merchant's last hundred parcels with their number of scans.
-- One merchant sends more than a fifth of all parcels: whoever works on that partition works alone.
select ranked.merchant_id, ranked.parcel_id, ranked.scans
from (
    select
        p.merchant_id,
        p.parcel_id,
        count(s.scan_id) as scans,
        row_number() over (partition by p.merchant_id order by p.parcel_id desc) as place
    from parcels p
    left join scans s on s.parcel_id = p.parcel_id
    group by p.merchant_id, p.parcel_id
) ranked
where ranked.place <= 100
