-- purpose: count the rows that compacting is to make fewer
-- grain:   one row
-- params:  none
-- reads:   histogram, moment, carry; writes: nothing
select
    (select count(*) from histogram) as histogram_rows, (select count(*) from moment) as moment_rows,
    (select count(*) from carry) as carry_rows
