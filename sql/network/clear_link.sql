-- purpose: empty the table before another network is loaded into a store without batches
-- grain:   every row
-- params:  none
-- reads:   nothing; writes: link
delete from link
