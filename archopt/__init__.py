"""archopt."""
