-- Wanted: the parcels of the merchants in the top tier.
-- DISTINCT over rows that hold the parcel's key, each joined to one merchant at most: sorted or hashed for nothing.
select distinct p.parcel_id, p.barcode, p.service, m.code as merchant
from parcels p
join merchants m on m.merchant_id = p.merchant_id
where m.tier = 'prime'
