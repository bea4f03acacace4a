"""Many calibration documents to many gateways, in waves: plan, waves, gate and register, over the retained topics."""
