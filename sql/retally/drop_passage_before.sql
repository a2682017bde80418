-- purpose: drop the passages that were written anew
-- grain:   the table
-- params:  none
-- reads:   nothing; writes: passage_before
drop table passage_before
