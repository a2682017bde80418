-- purpose: add up the histograms of the strata that fall into one group
-- grain:   one row per group, bin that is not empty
-- params:  $tally
-- reads:   incoming (registered: stratum_id bigint, group_ix integer), histogram_total; writes: nothing
select g.group_ix, h.bin_ix, sum(h.n)::bigint as n
from incoming as g
join histogram_total as h on h.stratum_id = g.stratum_id
where h.tally = $tally
group by g.group_ix, h.bin_ix
order by g.group_ix, h.bin_ix
