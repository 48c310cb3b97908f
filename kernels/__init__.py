"""The mathematics of Shardfold: numbers in, numbers out; NumPy and SciPy and nothing else.

No clock, path, log, thread or global state lives here, and nothing here knows what a shard is.

The algebra on one screen. ``A`` (m channels x n samples) is never held; a block of samples is::

    prepared   A_b = factor * (raw * gain + shift)          the channel table only, never the data
    centred    on its own mean while it is in memory

    stack      R_b = [ X_b = Upsilon A_b      k rows, stored: it becomes the coefficients
                       Theta A_b              q rows, to judge modes later
                       Xi_b                   q rows, addressed by sample
                       G_b ]                  p rows, known functions of time

    summary    n, mean(A), mean(R), energy by channel, range by channel,
               outer = A R^T = [W H F A G^T],    inner = R R^T = [C ...]

    merge      d = difference of the means, w = n1 n2 / (n1 + n2):
               outer += w d_A d_R^T    inner += w d_R d_R^T    energy += w d_A^2

    finish     d C d = Q L Q^T,   d = diag(C)^(-1/2)
               A P = W d Q L^(-1/2) = U S V1^T,   coefficients S V1^T L^(-1/2) Q^T d (X + Upsilon (mean_b - mean) 1^T)

Laws, each held by a property test:

1. ``merge`` is associative and commutative up to rounding, with ``zero`` as its neutral element.
2. Any partition of the samples into blocks, in any order, gives the same summary up to rounding, whatever the offsets.
3. If the rank of the centred ``A`` is below k, modes, values and coefficients are those of its exact decomposition.
4. Captured energy is exact: ``|A - A P P^T|^2 = energy - |A P|^2``, whole and by channel.
5. The same block folded into the same summary gives the same bits; random numbers depend on their address only.
6. Signs and order are idempotent, and small noise does not flip them.

Reading order: ``checks``, ``addressed`` (random matrices by address), ``blocks`` (preparation), ``comoments`` (the
summary and its merge), ``whole`` (a block into a summary, the hot path), ``factors`` (modes), ``spectra``, ``cost``.
"""
