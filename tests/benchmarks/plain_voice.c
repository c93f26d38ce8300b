/* The yardstick: the voice as one plain loop. An RC pitch slew stepped by its exact factor, 2 to the power of the voltage,
   a saw with a two-sample polynomial band-limited step (BLEP), a linear gain slew. Events fall on samples. */
#include <math.h>
#include <stddef.h>

typedef struct { long sample; double volts; double gate; } event;

void plain_voice(const event *events, size_t event_count, double sample_rate, double zero_hz, double time_constant,
                 double rise, double fall, double level, float *out, size_t count) {
    const double factor = exp(-1.0 / (time_constant * sample_rate));
    const double up = 1.0 / (rise * sample_rate), down = 1.0 / (fall * sample_rate);
    double target = events[0].volts, volts = target, gate = 0.0, gain = 0.0, phase = 0.0;
    size_t next = 0;
    for (size_t n = 0; n < count; n++) {
        while (next < event_count && events[next].sample <= (long)n) {
            target = events[next].volts;
            gate = events[next].gate;
            next++;
        }
        const double step = zero_hz * exp2(volts) / sample_rate;
        double saw = 2.0 * phase - 1.0;
        if (phase < step) {
            const double t = phase / step;
            saw -= t + t - t * t - 1.0;
        } else if (phase > 1.0 - step) {
            const double t = (phase - 1.0) / step;
            saw -= t * t + t + t + 1.0;
        }
        out[n] = (float)(level * gain * saw);
        phase += step;
        if (phase >= 1.0) phase -= 1.0;
        volts = target + (volts - target) * factor;
        if (gain < gate) gain = fmin(gain + up, gate);
        else if (gain > gate) gain = fmax(gain - down, gate);
    }
}
