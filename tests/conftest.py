"""What all tests share: generated examples are the same in every run, so that none fails for nothing."""

import hypothesis

hypothesis.settings.register_profile("fixed", derandomize=True, deadline=None)
hypothesis.settings.load_profile("fixed")
