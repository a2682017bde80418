-- purpose: note what the counts of all batches rest on now
-- grain:   one row per batch
-- params:  $config_digest, $network_digest
-- reads:   nothing; writes: batch
update batch
set config_digest = $config_digest, network_digest = $network_digest
