-- purpose: book the time of passages and sections that were taken back as other time of trips that stay, as after
--          a break
-- grain:   one row per trip
-- params:  none
-- reads:   incoming (registered:
--            vehicle varchar, trip_id bigint, n_passages integer, passage_us bigint, section_us bigint);
--          writes: trip
update trip
set
    n_passages = trip.n_passages - i.n_passages, passage_us = trip.passage_us - i.passage_us,
    section_us = trip.section_us - i.section_us, other_us = trip.other_us + i.passage_us + i.section_us,
    n_breaks = trip.n_breaks + 1
from incoming as i
where trip.vehicle = i.vehicle and trip.trip_id = i.trip_id
