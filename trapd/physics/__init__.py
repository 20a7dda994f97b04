"""Pure SI functions of trap physics: no input, no output, no clock.

Conventions, everywhere below: volts are at the electrode, zero to peak; frequencies are in Hz. With tau = Omega t / 2 an
ion of charge Q and mass m moves as ``u'' + 2 kappa u' + [A + 2 Q cos 2 tau] u = 0``, where ``A = 4 Q H_dc / (m Omega^2)``,
``Q = 2 Q H_rf / (m Omega^2)`` (H: second derivatives of the potential at the trap's centre, V/m^2) and
``kappa = damping / Omega``. A secular frequency is ``beta f_drive / 2``.
"""
