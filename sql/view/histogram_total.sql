-- purpose: histograms over all batches
-- grain:   one row per tally, stratum, bin that is not empty
-- params:  none
-- reads:   histogram; writes: nothing
create view histogram_total as
select tally, stratum_id, bin_ix, sum(n)::bigint as n
from histogram
group by tally, stratum_id, bin_ix
