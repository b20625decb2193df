"""Critical curves and caustics as polylines."""
