"""The diary of a burn-in: one build (or several) measured again and again into a log that survives a crash.

``log`` keeps the records, ``schedule`` says when, ``source`` from where, ``loop`` does it; ``trend`` puts
together what the log says, from ``drift``, ``causes``, ``stability``, ``siblings`` and ``alarms``.
"""
