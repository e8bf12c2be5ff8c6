"""Did it help: what differs between sites before and after harmonisation, on phantoms and on regions."""
