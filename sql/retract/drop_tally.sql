-- purpose: forget the tallies, which the next first batch names anew
-- grain:   one row per tally
-- params:  none
-- reads:   nothing; writes: tally
delete from tally
