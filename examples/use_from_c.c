/*
 * One measurement of the buoy's attitude estimator, with the routines that
 * buoy_estimator.toml stands for. From the root of the project:
 *
 *     .venv/bin/demilune build examples/buoy_estimator.toml
 *     gcc -std=c99 -O2 -I build_out examples/use_from_c.c build_out/buoy.c -o build_out/use_from_c
 *     build_out/use_from_c
 *
 * The numbers are invented.
 */
#include <stdio.h>

#include "buoy.h"

enum { ROWS = 12, STORED = ROWS * (ROWS + 1) / 2 };

/* Where P(i,j) with i <= j is stored: the formula that buoy.h states. */
static int place(int i, int j)
{
    return i + j * (j + 1) / 2;
}

int main(void)
{
    float covariance[STORED];
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

    buoy_predict(covariance, sensor, gain);
    buoy_gate(covariance, sensor, expected);
    printf("expected variance of the measurement: %.7f\n", (double)(expected[0] + noise));

    printf("variance of the roll before it:       %.7f\n", (double)covariance[place(0, 0)]);
    buoy_update(-1.0f / (expected[0] + noise), gain, covariance);
    printf("variance of the roll after it:        %.7f\n", (double)covariance[place(0, 0)]);
    return 0;
}
