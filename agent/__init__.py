"""The live agent: plant tags in; margins, findings and alarms out to one store."""
