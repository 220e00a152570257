"""Score which listed source an arc came from."""
