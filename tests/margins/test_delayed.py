import numpy as np

from ssaudit.margins.delayed import count_unstable
from ssaudit.margins.state_space import StateSpace


def test_pole_count_with_delay_against_pade(tools):
    A, B, C, D = tools.loop([4, 1], [1, 1, 3, 2])
    tau = np.array([0.05, 0.2, 0.5, 1.0])
    stacks = (np.tile(x, (4, 1, 1)) for x in (A, B, C, D))
    count, sound = count_unstable(StateSpace(*stacks), tau)
    assert sound.all()
    for t, ours in zip(tau, count, strict=True):
        m = 10
        ratio = [1.0]
        for i in range(m):
            ratio.append(ratio[-1] * (m - i) / ((2 * m - i) * (i + 1)))
        q = np.array([r * t**i for i, r in enumerate(ratio)])[::-1]
        p = q * (-1.0) ** np.arange(m, -1, -1)
        closed = np.polyadd(np.polymul(q, [1, 1, 3, 2]), np.polymul(p, [4, 1]))
        assert ours == (np.roots(closed).real > 0).sum()
    assert set(count) != {0.0}
