"""The HTTP service around ``streaming``: durable intake, one worker thread, readers that never wait for it."""
