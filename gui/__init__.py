"""The window. It will stand on the engine through `core.jobs` only; core never imports it."""
