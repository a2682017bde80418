-- purpose: give the passages another name while they are written anew in the same transaction
-- grain:   the table
-- params:  none
-- reads:   nothing; writes: passage
alter table passage rename to passage_before
