"""Cards over HTTP: endpoints, who may call them, and what is said when something is wrong. No medicine here."""
