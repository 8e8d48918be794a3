-- Wanted: claims of each depot, set against the routes that start there.
-- The routes are listed but never tied to the depot: every claim meets every route of the network.
select d.code, r.route_id, count(*) as claims, sum(c.amount) as claimed
from claims c, parcels p, depots d, routes r
where c.parcel_id = p.parcel_id
  and p.depot_id = d.depot_id
  and c.opened_on >= date '2026-03-01'
group by d.code, r.route_id
order by claims desc, d.code, r.route_id
