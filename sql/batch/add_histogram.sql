-- purpose: add the counts of one batch to the histograms
-- grain:   one row per tally, stratum, bin
-- params:  $batch_id
-- reads:   incoming (registered:
--            tally varchar, stratum_id bigint, bin_ix integer, n bigint); writes: histogram
insert into histogram (
    batch_id, tally, stratum_id, bin_ix, n
)
select
    $batch_id, tally, stratum_id, bin_ix, n
from incoming
