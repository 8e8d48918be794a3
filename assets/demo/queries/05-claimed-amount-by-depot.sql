-- Wanted: what is claimed, by depot, for parcels with failed delivery attempts.
-- A claim is added up once for every attempt: the sums are too high.
select d.code, sum(c.amount) as claimed, count(*) as claims
from claims c
join parcels p on p.parcel_id = c.parcel_id
join scans s on s.parcel_id = p.parcel_id and s.kind = 'attempted'
join depots d on d.depot_id = p.depot_id
group by d.code
