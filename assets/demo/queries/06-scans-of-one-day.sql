-- Wanted: scans of 10 March by depot and kind.
-- The day is asked through functions of the time, so neither statistics nor an index or zone map on it can help.
select s.depot_id, s.kind, count(*) as scans
from scans s
where cast(s.scanned_at as date) = date '2026-03-10'
  and upper(s.kind) in ('LOADED', 'ATTEMPTED')
group by s.depot_id, s.kind
