"""The mathematics of Shardfold: numbers in, numbers out; NumPy and SciPy and nothing else.

No clock, path, log, thread or global state lives here, and nothing here knows what a shard is.

The algebra on one screen. ``A`` (m channels x n samples) is never held; a block of samples is::

    prepared   A_b = factor * (raw * gain + shift)          the channel table only, never the data
    centred    on its own mean while it is in memory

    stack      R_b = [ X_b = Upsilon A_b      k rows, stored: it becomes the coefficients
                       Theta A_b              q rows, to judge modes
                       Xi_b                   q rows, addressed by sample
                       G_b ]                  p rows, known functions of time

    summary    n, mean(A), mean(R), energy by channel, range by channel,
               outer = A R^T = [W H F A G^T],    inner = R R^T = [C ...]

    merge      d = difference of the means, w = n1 n2 / (n1 + n2):
               outer += w d_A d_R^T    inner += w d_R d_R^T    energy += w d_A^2

    reduce     any rows of G taken off after the fact, T = pinv(G G^T):
               outer -= (A G^T) T (G R^T)    inner -= (R G^T) T (G R^T)    energy -= diag(A G^T T G A^T)

    finish     d C d = Q L Q^T,   d = diag(C)^(-1/2)
               A P = W d Q L^(-1/2) = U S V1^T,   coefficients S V1^T L^(-1/2) Q^T d (X + Upsilon (mean_b - mean) 1^T)

    judge      E = A A^T - U S^2 U^T is seen through H = A (Theta A)^T and F = A Xi^T:
               r_i = |E u_i|,  g_i^2 = u_i^T E u_i,  nu >= the largest eigenvalue of E;  bounds on angles follow

    exact      for few channels: instead of products a triangle T, T^T T = [G; A] [G; A]^T, by the same rules in
               square-root form (a difference of means is one more row)

Laws, each held by a property test:

1. ``merge`` is associative and commutative up to rounding, with ``zero`` as its neutral element.
2. Any partition of the samples into blocks, in any order, gives the same summary up to rounding, whatever the offsets.
3. If the rank of the centred ``A`` is below k, modes, values and coefficients are those of its exact decomposition.
4. Captured energy is exact: ``|A - A P P^T|^2 = energy - |A P|^2``, whole and by channel.
5. The same block folded into the same summary gives the same bits; random numbers depend on their address only.
6. Signs and order are idempotent, and small noise does not flip them.
7. Functions of time removed after the fact leave what removing them before leaves.
8. Bounds cover the truth, or there is none; equal modes are never certified one by one.

Reading order: ``checks``, ``addressed`` (random matrices by address), ``blocks`` (preparation), ``comoments`` (the
summary and its merge), ``whole`` (a block into a summary, the hot path), ``background`` (functions of time and their
removal), ``factors`` (modes), ``exact`` (the route for few channels), then what can be said of modes: ``bounds``
(computation), ``noise``, ``leaves`` and ``sampling`` (length of the campaign), ``remedy`` (what would help),
``verdicts``, ``ranks`` (how many modes); last ``spectra`` and ``cost``.
"""
