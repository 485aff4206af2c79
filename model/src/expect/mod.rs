//! What a gauge should show: modes, meters, gauges; the whitening filter and its bands.
