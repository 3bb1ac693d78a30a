r"""Pluggable instruments: imports serial libraries, never daq, never simulator.

From a manual's protocol page to a working driver
=================================================

1. *Perhaps none is needed.* Lines of text, SCPI, Modbus and number files are read by ``textline``,
   ``scpi``, ``modbus`` and ``numberfile`` with options alone; each module shows them by example at its
   head.
2. *Read the page for five things:* how a message begins and ends; what the instrument says for "no
   number"; whether an answer names the channel or the question; a checksum; and a command that makes it
   say who it is.
3. *Codec first, without I/O.* One function from bytes or a line to numbers, tested with the examples
   printed in the manual. ``lines.LineCodec`` cuts lines, ``lines.parse_number`` reads numbers,
   sentinels and words. Whatever is not exactly as the page says raises ``NotTheAnswer``: never guess.
4. *The driver is thin.* ``options.OptionReader`` and ``transport.read_port`` take the options and
   report every mistake; ``conversation.Conversation`` asks, keeps every deadline, and sees to it that a
   late or repeated answer is never taken for another one. Give it one ``Question`` per exchange:
   ``voice`` is what the answer can be told apart by, ``distinct`` is for a question whose answer looks
   like no reading (the identity).
5. *Hold it to the contract.* ``checks.check_driver(make_driver, peer)`` tries every promise of
   ``base.py`` against a peer that misbehaves on demand, on ``scripted.ScriptedPort`` in a second, then
   on a pseudo-terminal or a socket.
6. *Make it known.* Ours: a line in ``registry.FAMILIES``. Yours: an entry point in the group
   ``upturn.drivers`` of your own distribution.

``tests/drivers/outside/`` holds a complete example with its test beside it.
"""
