"""Scale: thousands of nights, made up or archived, on one machine or a cluster, with the same bits."""
