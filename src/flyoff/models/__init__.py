"""What a filter may know: traced models, sensors, priors, kinematics, earth."""
