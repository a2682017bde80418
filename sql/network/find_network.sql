-- purpose: read the row that names the network
-- grain:   at most one row
-- params:  none
-- reads:   network; writes: nothing
select
    network_digest, class_names, n_junctions, n_arms, n_links, n_movements, min_lon, min_lat, max_lon, max_lat,
    seen_side, config, put_at
from network
