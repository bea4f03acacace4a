"""The documents that leave the device, their topics and schemas; pure."""
