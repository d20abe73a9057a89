/* A library that stands in for the DAQmx driver itself, for the package's way through ctypes.

   Built by test_ctypes.py, found under its own name through LD_LIBRARY_PATH by an unmodified package. One
   device, Dev1, with 8 inputs converted one after the other, 14 us apart; input 0 carries a once-per-rev
   pulse, input k a gap of -3 V and a 1X of 0.1 k V with a lag of 30 k degrees, at 25 turns a second.

   What it cannot show: anything of a device (see device_server.py), Windows' library names and calling
   convention, foreign threads (the driver registers no callbacks), what the real one checks in its arguments.
   The functions fake_* are for the test. Compiled with -DOLD it lacks a function, as an old driver would. */
#include <math.h>
#include <stdint.h>
#include <stdio.h>
#include <string.h>
#include <time.h>

#define STEP_S 14e-6
#define HZ 25.0
typedef struct { int used, n, input[8]; double rate, begun; uint32_t buffer; int64_t position; } Task;
static Task tasks[16];
static int fails_read, fails_start, absent, mute, stalls;

static double now(void) { struct timespec t; clock_gettime(CLOCK_MONOTONIC, &t); return t.tv_sec + t.tv_nsec / 1e9; }
static int gone(void) { return absent || mute ? -201003 : 0; }
static int64_t total(Task *t) { return t->begun ? (int64_t)((now() - t->begun) * t->rate) : 0; }

int fake_tasks(void) { int n = 0; for (int i = 0; i < 16; i++) n += tasks[i].used; return n; }
void fake_read_fails(int code) { fails_read = code; }
void fake_start_fails(int code) { fails_start = code; }
void fake_absent(int on) { absent = on; }
void fake_mute(int on) { mute = on; }
void fake_short(int samples) { stalls = samples; }

static int text(const char *said, char *to, uint32_t size) {
    if (size == 0) return (int)strlen(said) + 1;
    snprintf(to, size, "%s", said);
    return 0;
}
int DAQmxGetErrorString(int code, char *to, uint32_t size) { (void)code; return text("made-up warning", to, size); }
int DAQmxGetExtendedErrorInfo(char *to, uint32_t size) { return text("made-up text of the driver", to, size); }
int DAQmxGetSystemInfoAttribute(int what, void *to, uint32_t size) {
    if (what == 0x193B) return text(absent ? "" : "Dev1", to, size);
    *(uint32_t *)to = 25;
    return 0;
}
int DAQmxGetDeviceAttribute(const char *device, int what, void *to, uint32_t size) {
    if (gone() || strcmp(device, "Dev1")) return gone() ? gone() : -200220;
    if (what == 0x0631) return text("SIM-C", to, size);
    *(uint32_t *)to = what == 0x0632 ? 0xC0DE : what == 0x2994 ? 2 : 0; /* serial, dc only, multiplexed */
    return 0;
}
int DAQmxCreateTask(const char *name, void **task) {
    (void)name;
    for (int i = 0; i < 16; i++)
        if (!tasks[i].used) { memset(&tasks[i], 0, sizeof(Task)); tasks[i].used = 1; *task = &tasks[i]; return 0; }
    return -50103;
}
int DAQmxGetTaskAttribute(void *task, int what, char *to, uint32_t size) {
    (void)task; (void)what;
    return text("task", to, size);
}
int DAQmxClearTask(Task *t) { t->used = 0; return 0; }
int DAQmxStopTask(Task *t) { t->begun = 0; return gone() ? gone() : fails_read; }
int DAQmxStartTask(Task *t) {
    int code = fails_start;
    fails_start = 0;
    if (!code) t->begun = now();
    return gone() ? gone() : code;
}
int DAQmxCreateAIVoltageChan(Task *t, const char *input, const char *name, int terminal, double low, double high,
                             int units, const char *scale) {
    (void)name; (void)scale;
    if (terminal != 10106 || units != 10348 || low != -10.0 || high != 10.0) return -200077;
    return sscanf(input, "Dev1/ai%d", &t->input[t->n++]) == 1 ? 0 : -200170;
}
int DAQmxCfgSampClkTiming(Task *t, const char *source, double rate, int edge, int mode, uint64_t samples) {
    (void)source; (void)edge; (void)samples;
    t->rate = rate;
    return mode == 10123 ? 0 : -200077; /* continuous */
}
int DAQmxGetTimingAttribute(Task *t, int what, double *to) { *to = what == 0x1344 ? t->rate : 1 / STEP_S; return 0; }
int DAQmxSetBufferAttribute(Task *t, int what, uint32_t value) { (void)what; t->buffer = value; return 0; }
#ifndef OLD
int DAQmxSetReadAttribute(Task *t, int what, int value) { (void)t; return what == 0x1211 && value == 10159 ? 0 : -200077; }
#endif
int DAQmxGetChanAttribute(Task *t, const char *input, int what, double *to) {
    (void)t; (void)input;
    *to = what == 0x1816 ? -10.0 : 10.0;
    return 0;
}
int DAQmxGetReadAttribute(Task *t, int what, void *to) {
    if (gone()) return gone();
    if (what == 0x192A) *(uint64_t *)to = (uint64_t)total(t);
    else *(uint32_t *)to = what == 0x217B ? (uint32_t)t->n : (uint32_t)(total(t) - t->position);
    return 0;
}
static double volts(int input, double t) {
    double turns = HZ * t, u = fmod(turns + 0.5, 1.0) - 0.5, flank = 4.0 / 360, width = 12.0 / 360;
    double a = u / flank + 0.5, b = (u - width) / flank + 0.5;
    if (input == 0) return 5.0 * (fmin(fmax(b, 0), 1) - fmin(fmax(a, 0), 1));
    return -3.0 + 0.1 * input * cos(2 * M_PI * turns - 30.0 * input * M_PI / 180);
}
int DAQmxReadAnalogF64(Task *t, int count, double timeout, int fill, double *to, uint32_t size, int *came, void *none) {
    double until = now() + timeout;
    int wanted = stalls ? stalls : count, code = gone() ? gone() : fails_read;
    (void)none;
    if (fill != 0 || size < (uint32_t)(count * t->n)) return -200077; /* by channel */
    if (total(t) - t->position > t->buffer) code = -200279;
    *came = 0;
    if (code < 0) { fails_read = 0; return code; }
    while (total(t) - t->position < wanted) {
        if (now() > until) break;
        nanosleep(&(struct timespec){0, 2000000}, NULL);
    }
    for (int k = 0; k < t->n; k++)
        for (int i = 0; i < wanted; i++) *to++ = volts(t->input[k], (t->position + i) / t->rate + k * STEP_S);
    t->position += wanted;
    *came = wanted;
    fails_read = stalls = 0;
    return wanted < count ? -200284 : code;
}
