"""Dark current from dark traces, and its dependence on bias."""
