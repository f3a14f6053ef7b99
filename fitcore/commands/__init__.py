"""The command line `weakmix`: one file per command, loaded only when it is called."""
