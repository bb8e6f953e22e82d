/*
 * The buoy's firmware, as far as it matters here: a power-on self-test of the routines, then one
 * measurement of the attitude estimator. It prints nothing; the exit status tells what it found:
 * 0 all is well, 1 to 99 recorded cases that differ (99 stands for more, too), 100 the estimate is
 * not as it should be. The numbers are invented.
 */
#include "buoy.h"

enum { ROWS = 12, STORED = ROWS * (ROWS + 1) / 2, MOST = 99, WRONG = 100 };

int buoy_selftest(void);

/* Where P(i,j) with i <= j is stored: the formula that buoy.h states. */
static int place(int i, int j)
{
    return i + j * (j + 1) / 2;
}

/* One measurement: gives the variance of the roll after it, and before it in *before. */
static float measured(float *before)
{
    static float covariance[STORED]; /* static: the stack of a small part is short */
    float sensor[ROWS] = {0.0f};
    float gain[ROWS];
    float expected[1];
    const float noise = 0.01f; /* variance of the sensor */

    for (int j = 0; j < ROWS; j++) { /* every state 0.04, neighbours related */
        float value = 0.04f;
        for (int i = j; i >= 0; i--) {
            covariance[place(i, j)] = value;
            value *= 0.5f;
        }
    }
    sensor[0] = 1.0f; /* the sensor shows the roll and half of its rate */
    sensor[3] = 0.5f;
    *before = covariance[place(0, 0)];
    buoy_predict(covariance, sensor, gain);
    buoy_gate(covariance, sensor, expected);
    buoy_update(-1.0f / (expected[0] + noise), gain, covariance);
    return covariance[place(0, 0)];
}

int main(void)
{
    const int differing = buoy_selftest();
    float before;
    float after;

    if (differing != 0) {
        return differing < MOST ? differing : MOST;
    }
    after = measured(&before);
    return after > 0.0f && after < before ? 0 : WRONG;
}
