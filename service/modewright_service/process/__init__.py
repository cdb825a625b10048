"""The service as a process: settings, supervised workers, spool, lifecycle, telemetry."""
