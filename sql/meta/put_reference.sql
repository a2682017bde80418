-- purpose: add a version of the cruise speeds
-- grain:   one row per version
-- params:  $reference_id, $basis, $made_us
-- reads:   nothing; writes: reference
insert into reference (reference_id, basis, made_at)
values ($reference_id, $basis, make_timestamp($made_us))
