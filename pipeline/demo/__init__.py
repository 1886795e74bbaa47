"""An invented collection to try the tool on."""
