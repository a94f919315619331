"""Questions asked of a stressed figure: where it comes from, how sure it is, what would break it, was it right before.

They stand on :class:`stresskit.runs.setting.Setting`, which projects the whole book along a path in one call.
"""
