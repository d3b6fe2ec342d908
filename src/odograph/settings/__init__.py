"""Settings: one small typed model per stage; the configuration file and its schema are made from them."""
