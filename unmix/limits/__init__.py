"""What an array can achieve at best, computed before any recording exists.

When the constrained model is solvable. M microphones, K talkers in the far field, delays tau_mk relative to the
reference microphone, each microphone with its own noise; s is a talker's power over that noise in one microphone.

One snapshot is not enough. About the sample itself ("own" anchor) y_m = sum_k sum_l (-tau_mk)^l / l! z_k^(l): for
l = 0 the factor is 1 for every talker and microphone, so the K columns of the zeroth order are one and the same. A
snapshot leaves K - 1 combinations of talkers free, whatever the number of microphones and the order.

What the constraint restores. Derivatives in time are those of neighbouring samples, so that at each frequency one
unknown per talker is left, with columns h_k = exp(-j omega tau_k). With two talkers, D_m = tau_m1 - tau_m2 and
rho = mean_m exp(-j omega D_m), the eigenvalues of H^H H are M (1 +- |rho|): above zero frequency the columns differ as
soon as D is not the same at all microphones. To lowest order 1 - |rho|^2 = omega^2 var(D), so

    smallest singular value   sqrt(M / 2) omega std(D)
    noise gain                1 / (M (1 - |rho|^2))  =  1 / (M omega^2 var(D))

The lowest usable frequency. For a talker to come out r above the noise, noise gain <= s / r, and

    f_low = sqrt(r / (s M)) / (2 pi std(D)),        circle of radius a:  std(D) = sqrt(2) a sin(delta / 2) / c

for talkers delta apart. It is halved by twice the aperture, by four times the microphones, by 6 dB of SNR. K talkers
on a straight line resolve by differences of order K - 1: the smallest singular value falls as omega^(K - 1); in a
plane three talkers still fall as omega.

What order does. An expansion of order L about "own" has at most K <= L + 1 independent columns on a line: order 0
separates nobody and K talkers need L >= K - 1. Beyond that the remainder, below (omega tau)^(L + 1) / (L + 1)!,
vanishes faster with frequency than the smallest singular value, so order does not move the lowest usable frequency: it
sets the highest. About the nearest sample |tau| <= T / 2 whatever the aperture.

Each statement is checked in `tests/limits/test_theory.py`.

    ladder       separations and third octaves: singular values, noise gain, usable band, best output SNR
    ambiguity    where spatial ambiguity starts
    expansion    the order needed for a stated error
    rooms        what is left of it in diffuse reverberation
    bounds       Cramer-Rao bounds on bearing and signal
    tolerances   gain, phase and position tolerances
    shapes       arrays to choose from
"""
