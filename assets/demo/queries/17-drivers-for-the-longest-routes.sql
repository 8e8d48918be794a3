-- Wanted: for the long routes, the drivers of their depot who hold every permit the route asks for (a division).
-- Written as a double negation: for each pair of route and driver all permits are gone through again.
select r.route_id, d.driver_id
from routes r
join drivers d on d.depot_id = r.depot_id
where r.km > 100
  and not exists (
      select 1
      from route_permits rp
      where rp.route_id = r.route_id
        and not exists (
            select 1
            from driver_permits dp
            where dp.driver_id = d.driver_id
              and dp.permit = rp.permit
        )
  )
