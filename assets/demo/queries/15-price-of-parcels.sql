-- Wanted: what the parcels of each service cost, by the tariff of their weight on their day.
-- Only inequalities tie a parcel to its tariff: no hash join can be used, and every pair may have to be looked at.
select p.service, count(*) as parcels, sum(t.price) as price
from parcels p
join tariffs t
  on p.weight_kg >= t.weight_from
 and p.weight_kg < t.weight_to
 and p.posted_at >= t.valid_from
 and p.posted_at < t.valid_to
group by p.service
