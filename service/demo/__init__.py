"""The demo portfolio: invented merchants, posted over HTTP like any caller would."""
