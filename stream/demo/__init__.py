"""An invented town with drivers whose delays are known; knows nothing of `detect`."""
