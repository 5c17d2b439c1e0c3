/* The law of least-loaded on two-server choices, written plainly: the yardstick for the compiled Python loop. */
#include <stdint.h>

void place(uint64_t *state, const uint32_t *options, int64_t *loads, uint64_t choices, int64_t tasks) {
    uint64_t a = state[0], b = state[1], c = state[2], counter = state[3];
    for (int64_t task = 0; task < tasks; task++) {
        uint64_t word = a + b + counter;
        counter += 1;
        a = b ^ (b >> 11);
        b = c + (c << 3);
        c = ((c << 24) | (c >> 40)) + word;
        unsigned __int128 product = (unsigned __int128)word * choices;
        uint64_t row = product >> 64, coin = (uint64_t)product;
        int64_t first = loads[options[2 * row]], second = loads[options[2 * row + 1]];
        int take = (second < first) | ((second == first) & (int)(coin >> 63));
        loads[options[2 * row + take]] += 1;
    }
    state[0] = a, state[1] = b, state[2] = c, state[3] = counter;
}
