"""The demo: an invented group, a live server, one request over HTTP, the answer printed."""
