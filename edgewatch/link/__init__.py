"""The MQTT session."""
