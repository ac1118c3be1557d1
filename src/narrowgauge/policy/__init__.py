"""The precision policy: drawn up from an audit, obeyed by running code, checked by the gate."""
