"""The controller: from configuration to route, run, safety, record and reduction."""
