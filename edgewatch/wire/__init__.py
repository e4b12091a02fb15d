"""Messages, topics, schemas, relay frames: values <-> bytes."""
