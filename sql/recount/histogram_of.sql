-- purpose: read the histograms of one batch
-- grain:   one row per tally, stratum, bin that is not empty
-- params:  $batch_id
-- reads:   histogram; writes: nothing
select tally, stratum_id, bin_ix, n
from histogram
where batch_id = $batch_id
