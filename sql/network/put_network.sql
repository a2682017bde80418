-- purpose: write the row that names the network
-- grain:   one row
-- params:  $network_digest, $class_names, $n_junctions, $n_arms, $n_links, $n_movements, $min_lon, $min_lat,
--          $max_lon, $max_lat, $seen_side, $config, $put_us
-- reads:   nothing; writes: network
insert into network (
    network_digest, class_names, n_junctions, n_arms, n_links, n_movements, min_lon, min_lat, max_lon, max_lat,
    seen_side, config, put_at
)
values (
    $network_digest, $class_names, $n_junctions, $n_arms, $n_links, $n_movements, $min_lon, $min_lat, $max_lon,
    $max_lat, $seen_side, $config, make_timestamp($put_us)
)
