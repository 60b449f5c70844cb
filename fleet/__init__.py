"""Many sites and one request: quote, allocate, order, record, settle, audit."""
