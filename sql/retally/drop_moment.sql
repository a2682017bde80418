-- purpose: drop the table before it is made and filled anew in the same transaction
-- grain:   the table
-- params:  none
-- reads:   nothing; writes: moment
drop table moment
