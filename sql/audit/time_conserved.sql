-- purpose: find trips whose time from first to last gate is not the sum of its parts, or whose passages and
--          sections are not the sums of the rows
-- grain:   one row per trip at fault; empty means sound
-- params:  none
-- reads:   trip, passage, section; writes: nothing
with part as (
    select vehicle, trip_id, 'passage' as kind, epoch_us(exit_at) - epoch_us(entry_at) as us
    from passage
    union all
    select vehicle, trip_id, 'section' as kind, epoch_us(to_at) - epoch_us(from_at) as us
    from section
), total as (
    select
        vehicle, trip_id,
        coalesce(sum(us) filter (where kind = 'passage'), 0) as passage_us,
        coalesce(sum(us) filter (where kind = 'section'), 0) as section_us,
        count(*) filter (where kind = 'passage') as n_passages
    from part
    group by vehicle, trip_id
)
select
    t.vehicle, t.trip_id, t.batch_id, epoch_us(t.last_gate_at) - epoch_us(t.first_gate_at) as between_gates_us,
    t.passage_us, t.section_us, t.unfinished_us, t.other_us, coalesce(s.passage_us, 0) as passage_rows_us,
    coalesce(s.section_us, 0) as section_rows_us, t.n_passages, coalesce(s.n_passages, 0) as n_passage_rows
from trip as t
left join total as s on s.vehicle = t.vehicle and s.trip_id = t.trip_id
where
    coalesce(epoch_us(t.last_gate_at) - epoch_us(t.first_gate_at), 0)
    <> t.passage_us + t.section_us + t.unfinished_us + t.other_us
    or t.passage_us <> coalesce(s.passage_us, 0)
    or t.section_us <> coalesce(s.section_us, 0)
    or t.n_passages <> coalesce(s.n_passages, 0)
order by t.vehicle, t.trip_id
