-- Wanted: all freight parcels, with their claim where it is over 50.
-- The condition on the claim stands in WHERE: the parcels without a claim, kept by LEFT JOIN, are thrown away again.
select p.parcel_id, p.merchant_id, c.amount
from parcels p
left join claims c on c.parcel_id = p.parcel_id
where p.service = 'freight'
  and c.amount > 50
