"""Look at the evidence in the browser and decide: `session` holds the state, `app` shows it, `server` guards it."""
