-- purpose: drop the view before it is made anew in the same transaction
-- grain:   the view
-- params:  none
-- reads:   nothing; writes: nothing
drop view bin
