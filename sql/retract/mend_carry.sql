-- purpose: book the time of passages and sections that were taken back as other time of trips that are open, as
--          after a break
-- grain:   one row per state
-- params:  none
-- reads:   incoming (registered:
--            vehicle varchar, batch_id bigint, n_passages integer, passage_us bigint, section_us bigint);
--          writes: carry
update carry
set
    n_passages = carry.n_passages - i.n_passages, passage_us = carry.passage_us - i.passage_us,
    section_us = carry.section_us - i.section_us, other_us = carry.other_us + i.passage_us + i.section_us,
    n_breaks = carry.n_breaks + 1
from incoming as i
where carry.vehicle = i.vehicle and carry.batch_id = i.batch_id
