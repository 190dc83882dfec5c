"""The inner step of the Viterbi algorithm as vector instructions: two states from two, for many frames.

Written out for the compiler, which otherwise spends a third of the time on asking whether the rows overlap.
"""

from typing import Any

from llvmlite import ir
from numba import types
from numba.extending import intrinsic

LANES = 192             # frames side by side; their metrics of 64 states stay in the cache next to the processor
WIDTH = 32              # numbers in a vector; a processor with shorter ones takes it in parts


@intrinsic
def butterfly(typing: Any, metric: Any, even: Any, odd: Any, branch: Any, low_0: Any, low_1: Any, high_0: Any,
              high_1: Any, mark: Any) -> Any:
    """Do, for every lane: (metric[even], metric[odd]) = (min(a + low_0, b + low_1), min(a + high_0, b + high_1)).

    metric, branch  uint16 (place,), flat
    even ... high_1 uint64: where the rows of LANES numbers begin in them
    mark            uint16; a = metric[even], b = metric[odd] + mark
    """
    signature = types.void(metric, even, odd, branch, low_0, low_1, high_0, high_1, mark)

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        vector = ir.VectorType(ir.IntType(16), WIDTH)
        metrics, costs = (context.make_array(signature.args[i])(context, builder, args[i]).data for i in (0, 3))

        def place(base: Any, row: Any, lane: int) -> Any:
            at = builder.add(row, ir.Constant(row.type, lane))
            return builder.bitcast(builder.gep(base, [at]), vector.as_pointer())

        def load(base: Any, row: Any, lane: int) -> Any:
            return builder.load(place(base, row, lane), align=2)

        def lesser(x: Any, y: Any) -> Any:
            return builder.select(builder.icmp_unsigned("<", x, y), x, y)

        marks = ir.Constant(vector, ir.Undefined)
        for i in range(WIDTH):
            marks = builder.insert_element(marks, args[8], ir.Constant(ir.IntType(32), i))
        for lane in range(0, LANES, WIDTH):
            a = load(metrics, args[1], lane)
            b = builder.add(load(metrics, args[2], lane), marks)
            low_0, low_1, high_0, high_1 = (load(costs, args[i], lane) for i in (4, 5, 6, 7))
            low = lesser(builder.add(a, low_0), builder.add(b, low_1))
            high = lesser(builder.add(a, high_0), builder.add(b, high_1))
            builder.store(low, place(metrics, args[1], lane), align=2)
            builder.store(high, place(metrics, args[2], lane), align=2)
        return context.get_dummy_value()

    return signature, generate
