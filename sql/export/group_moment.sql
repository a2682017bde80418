-- purpose: add up count, sum and sum of squares of the strata that fall into one group
-- grain:   one row per group
-- params:  $tally
-- reads:   incoming (registered: stratum_id bigint, group_ix integer), moment; writes: nothing
select g.group_ix, sum(m.n)::bigint as n, sum(m.sum)::hugeint as sum, sum(m.sum_sq)::hugeint as sum_sq
from incoming as g
join moment as m on m.stratum_id = g.stratum_id
where m.tally = $tally
group by g.group_ix
order by g.group_ix
