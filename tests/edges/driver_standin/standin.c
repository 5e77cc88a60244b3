/* A stand-in for the USB receiver's driver library: the calls that the Python binding makes, answered without hardware.
 *
 * It plays a file of bytes once, flat out, and then ends as it is told to; or paced, over and over. Built by a test with
 *   gcc -O2 -shared -fPIC -fvisibility=hidden -o librtlsdr.so standin.c
 *
 *   STANDIN_FILE      bytes to deliver
 *   STANDIN_END       what comes after them: "hang" (nothing more, no error), or the code that reading returns with
 *   STANDIN_SHORT     number of a buffer that is delivered half as long
 *   STANDIN_PACED     1: buffers come at the rate that was set; STANDIN_LOOPS 1: the file begins again
 *   STANDIN_FAULTS    what happens at which buffer, counted since the process began: "unplug@N:CODE drop@N:BUFFERS
 *                     stall@N:MS hang@N:0 short@N:0"
 *   STANDIN_MARKS     file that is told when the buffer with the file's first bytes is delivered (monotonic clock), and how
 *                     many of the file's bytes were delivered with it
 *   STANDIN_REFUSES   frequency that the tuner refuses, in hertz
 *   STANDIN_OPEN      code that opening returns with, 0 if left out
 *   STANDIN_DEVICES   how many devices there are, 1 if left out
 *   STANDIN_LOG       file to which settings are written, a line each
 */
#define _GNU_SOURCE
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <time.h>
#include <unistd.h>

#define CALL __attribute__((visibility("default")))

typedef void (*callback_t)(unsigned char *, uint32_t, void *);
typedef struct { uint32_t frequency, rate; int ppm, gain; volatile int running, cancelled; } device_t;

static int number(const char *name, int otherwise) {
    const char *text = getenv(name);
    return text ? atoi(text) : otherwise;
}

static int set(const char *what, long value) {
    const char *path = getenv("STANDIN_LOG");
    FILE *file = path ? fopen(path, "a") : NULL;
    if (file) {
        fprintf(file, "%s %ld\n", what, value);
        fclose(file);
    }
    return 0;
}

static long delivered, overrun; /* buffers, since the process began */
static double away_until;

static double now(void) {
    struct timespec time;
    clock_gettime(CLOCK_MONOTONIC, &time);
    return time.tv_sec + 1e-9 * time.tv_nsec;
}

CALL long standin_overruns(void) { return overrun; }

CALL uint32_t rtlsdr_get_device_count(void) { return now() < away_until ? 0 : number("STANDIN_DEVICES", 1); }
CALL const char *rtlsdr_get_device_name(uint32_t index) { return index < rtlsdr_get_device_count() ? "stand-in" : ""; }

CALL int rtlsdr_get_device_usb_strings(uint32_t index, char *maker, char *product, char *serial) {
    if (index >= rtlsdr_get_device_count()) return -2;
    if (maker) strcpy(maker, "tests");
    if (product) strcpy(product, "stand-in");
    if (serial) sprintf(serial, "%08u", index + 1);
    return 0;
}

CALL int rtlsdr_get_index_by_serial(const char *serial) { return serial ? atoi(serial) - 1 : -1; }

CALL int rtlsdr_open(device_t **device, uint32_t index) {
    int code = number("STANDIN_OPEN", 0);
    if (code || index >= rtlsdr_get_device_count()) return code ? code : -1;
    *device = calloc(1, sizeof **device);
    return set("open", index);
}

CALL int rtlsdr_close(device_t *device) {
    while (device->running) usleep(1000); /* as the driver does: it waits for the reading to end */
    free(device);
    return set("close", 0);
}

CALL int rtlsdr_set_center_freq(device_t *device, uint32_t hz) {
    if (hz == (uint32_t)number("STANDIN_REFUSES", -1)) return -1;
    device->frequency = hz;
    return set("frequency", hz);
}
CALL uint32_t rtlsdr_get_center_freq(device_t *device) { return device->frequency; }
CALL int rtlsdr_set_sample_rate(device_t *device, uint32_t hz) { device->rate = hz; return set("rate", hz); }
CALL uint32_t rtlsdr_get_sample_rate(device_t *device) { return device->rate; }
CALL int rtlsdr_get_freq_correction(device_t *device) { return device->ppm; }
CALL int rtlsdr_set_freq_correction(device_t *device, int ppm) {
    if (device->ppm == ppm) return -2; /* as the driver does */
    device->ppm = ppm;
    return set("ppm", ppm);
}
CALL int rtlsdr_get_tuner_type(device_t *device) { (void)device; return 5; }
CALL int rtlsdr_get_tuner_gains(device_t *device, int *gains) {
    static const int known[] = {0, 90, 197, 280, 402, 496};
    (void)device;
    if (gains) memcpy(gains, known, sizeof known);
    return sizeof known / sizeof *known;
}
CALL int rtlsdr_set_tuner_gain(device_t *device, int gain) { device->gain = gain; return set("gain", gain); }
CALL int rtlsdr_get_tuner_gain(device_t *device) { return device->gain; }
CALL int rtlsdr_set_tuner_gain_mode(device_t *device, int manual) { (void)device; return set("manual gain", manual); }
CALL int rtlsdr_set_direct_sampling(device_t *device, int input) { (void)device; return set("direct sampling", input); }
CALL int rtlsdr_set_bias_tee(device_t *device, int on) { (void)device; return set("bias", on); }

/* The argument of a fault at buffer n, -1 where none is asked for there. */
static long fault(const char *name, long n) {
    const char *text = getenv("STANDIN_FAULTS");
    char wanted[32];
    if (!text) return -1;
    snprintf(wanted, sizeof wanted, "%s@%ld:", name, n);
    text = strstr(text, wanted);
    return text ? atol(text + strlen(wanted)) : -1;
}

CALL int rtlsdr_read_async(device_t *device, callback_t callback, void *context, uint32_t count, uint32_t length) {
    const char *path = getenv("STANDIN_FILE"), *end = getenv("STANDIN_END");
    FILE *file = path ? fopen(path, "rb") : NULL, *marks = getenv("STANDIN_MARKS") ? fopen(getenv("STANDIN_MARKS"), "a") : NULL;
    unsigned char *buffer = malloc(length);
    int half = number("STANDIN_SHORT", -1), paced = number("STANDIN_PACED", 0), loops = number("STANDIN_LOOPS", 0);
    double start = now(), made = 0.0; /* seconds of samples that the receiver has made since the start */
    int code = 0;
    device->running = 1;
    while (file && !device->cancelled) {
        size_t got = fread(buffer, 1, length, file);
        long argument;
        if (got < length && loops) {
            rewind(file);
            got += fread(buffer + got, 1, length - got, file);
        }
        if (!got) break;
        if (marks && ftell(file) <= (long)length) { /* the buffer in which the file begins (again) */
            while (paced && !device->cancelled && now() - start < made + (double)length / 2 / device->rate) usleep(200);
            fprintf(marks, "%.6f %ld\n", now(), ftell(file));
            fflush(marks);
        }
        made += (double)length / 2 / device->rate;
        while (paced && !device->cancelled && now() - start < made) usleep(500);
        if (paced && now() - start > made + (double)count * length / 2 / device->rate) {
            overrun++; /* the program did not fetch its buffers: this one is lost, as on USB */
            delivered++;
            continue;
        }
        if ((argument = fault("unplug", delivered)) >= 0) { /* returns with minus that code; gone for 0.3 s */
            code = -(int)argument;
            away_until = now() + 0.3;
            delivered++;
            break;
        }
        if ((argument = fault("drop", delivered)) >= 0) { /* so many buffers vanish */
            made += (double)argument * length / 2 / device->rate;
            delivered++;
            continue;
        }
        if ((argument = fault("stall", delivered)) >= 0) usleep(1000 * argument); /* late, and nothing is lost */
        if (fault("hang", delivered) >= 0) {
            delivered++;
            while (!device->cancelled) usleep(1000);
            break;
        }
        if (fault("short", delivered) >= 0) got = got / 4 * 2;
        callback(buffer, delivered == half ? got / 2 : got, context);
        delivered++;
    }
    if (file) fclose(file);
    if (marks) fclose(marks);
    while (end && !strcmp(end, "hang") && !device->cancelled) usleep(1000);
    free(buffer);
    device->running = 0;
    if (code || device->cancelled || !end || !strcmp(end, "hang")) return code;
    return atoi(end);
}

CALL int rtlsdr_cancel_async(device_t *device) {
    if (!device->running) return -2; /* as the driver does */
    device->cancelled = 1;
    return 0;
}

/* Calls that the binding looks for and the receiver never makes. */
#define UNUSED(name) CALL int name(void) { return 0; }
UNUSED(rtlsdr_get_gpio_bit) UNUSED(rtlsdr_get_gpio_byte) UNUSED(rtlsdr_get_xtal_freq) UNUSED(rtlsdr_read_sync)
UNUSED(rtlsdr_reset_buffer) UNUSED(rtlsdr_set_agc_mode) UNUSED(rtlsdr_set_and_get_tuner_bandwidth)
UNUSED(rtlsdr_set_dithering) UNUSED(rtlsdr_set_gpio_bit) UNUSED(rtlsdr_set_gpio_byte) UNUSED(rtlsdr_set_gpio_input)
UNUSED(rtlsdr_set_gpio_output) UNUSED(rtlsdr_set_gpio_status) UNUSED(rtlsdr_set_testmode)
UNUSED(rtlsdr_set_tuner_bandwidth) UNUSED(rtlsdr_set_xtal_freq) UNUSED(rtlsdr_wait_async)
