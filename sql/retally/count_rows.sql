-- purpose: count what is to be counted anew
-- grain:   one row
-- params:  none
-- reads:   passage, section; writes: nothing
select (select count(*) from passage) as n_passages, (select count(*) from section) as n_sections
