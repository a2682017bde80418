-- purpose: forget the strata that no batch counts any more
-- grain:   one row per tally, stratum, dimension
-- params:  none
-- reads:   moment; writes: stratum
delete from stratum
where not exists (
    select 1 from moment as m
    where m.tally = stratum.tally and m.stratum_id = stratum.stratum_id
)
