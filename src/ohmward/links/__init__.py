"""VISA sessions made dependable: no reply of one query is ever taken for another's.

``link`` holds the rules, ``waiter`` says what waiting is, ``thread_waiter`` waits for real
instruments and ``virtual_waiter`` for simulated ones; ``stream_session`` and its two children
replace PyVISA-py's sessions where those can hang or lose half a reply.
"""
