-- purpose: note digest and keys of a network whose zones or maneuvers were given anew
-- grain:   one row
-- params:  $network_digest, $config
-- reads:   nothing; writes: network
update network
set network_digest = $network_digest, config = $config
