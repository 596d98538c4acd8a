"""The integrated rate law in 90 decimal digits, by Newton steps: what the closed form is held against."""

from __future__ import annotations

from decimal import Decimal, getcontext

getcontext().prec = 90


def exact(
    s0: Decimal, vmax: Decimal, km: Decimal, time: Decimal, inverse_kp: Decimal, loss: Decimal
) -> tuple[Decimal, Decimal]:
    """Product and substrate left; inverse_kp 0 for no product inhibition."""
    reach = vmax * (time if loss == 0 else (1 - (-loss * time).exp()) / loss)
    # Km (1 + S0/Kp) u + S0 (1 - Km/Kp) (1 - exp(-u)) = reach, from the definition, not from the code.
    a, b = km * (1 + s0 * inverse_kp), s0 * (1 - km * inverse_kp)
    low, high = Decimal(0), reach / a + (-b / a if b < 0 else 0) + 1
    u = (low + high) / 2
    for _ in range(400):
        excess = a * u + b * (1 - (-u).exp()) - reach
        low, high = (low, u) if excess > 0 else (u, high)
        moved = u - excess / (a + b * (-u).exp())
        if not low <= moved <= high:
            moved = (low + high) / 2
        if abs(moved - u) <= Decimal("1e-52") * abs(u):
            u = moved
            break
        u = moved
    else:
        raise AssertionError("the reference did not settle")
    left = s0 * (-u).exp()
    return s0 - left, left
