/* mcu: runs the compiled firmware on a simulated ATmega328P and puts its serial line on a pseudo terminal.
 *
 * One rule: nothing is lost and nothing hangs. When nobody reads the line, simulated time stops; every wait has a
 * time-out; when standard input ends, so does the run.
 *
 * Standard output tells, a line each:  pty PATH | baud N | cycles N | conversion MS | reset MS | end MS BYTES  (MS is
 * simulated time since the start; of the conversions only the first two after a start or reset are told: the example's
 * first is for settling, on the second's time its raster hangs). Standard input takes, a line each:  run | reset |
 * quit. After the end the line stays up, silent, until quit, so that what is still under way reaches the reader.
 *
 * What started the chip stands in its MCUSR: at first power, or the bits given as --cause; after a reset the reset pin.
 *
 * The waveform file holds lines `ms forward_mv reflected_mv`, times rising; each line holds until the next, the
 * last one for ever, and before the first both inputs are at 0. Time runs from the last start or reset; millivolts
 * are taken to a tenth.
 *
 * SPDX-License-Identifier: MIT
 */
#define _GNU_SOURCE
#include <errno.h>
#include <fcntl.h>
#include <getopt.h>
#include <poll.h>
#include <pty.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <termios.h>
#include <time.h>
#include <unistd.h>

#include <avr_adc.h>
#include <avr_uart.h>
#include <sim_avr.h>
#include <sim_elf.h>

#define HZ 16000000UL
#define CYCLES_A_MS (HZ / 1000)
#define NS_A_MS 1000000LL
#define SUPPLY_MV 5000
#define AREF_MV 2500
/* The simulator's converter takes whole numbers. A step of it is 1.07 mV: whole millivolts would beat against it, and
 * what was meant as a smooth voltage would come out as a saw tooth of half a step. */
#define UNITS_A_MV 10
#define CONVERSIONS_TOLD 2
#define PATIENCE_MS 250 /* no single wait is longer */
#define LONGEST_LINGER_MS 60000
#define LONGEST_LAG_NS (20 * NS_A_MS)

/* ATmega328P: data-space addresses. */
#define GPIOR0 0x3E
#define MCUSR 0x54
#define UCSR0A 0xC0
#define UBRR0L 0xC4
#define UBRR0H 0xC5
#define U2X0 0x02
#define PORF 0x01
#define EXTRF 0x02

struct step {
    double ms;
    uint32_t forward, reflected; /* in 1/UNITS_A_MV mV */
};

static struct {
    const char *elf, *waveform;
    double stop_ms, reset_ms;
    int forward_input, reflected_input, paced, held, cause;
} asked = {.reflected_input = 1, .cause = PORF};

static struct {
    avr_t *avr;
    avr_uart_t *uart;
    avr_irq_t *adc;
    struct step *steps;
    size_t steps_n, step;
    unsigned conversions; /* told since the last start */
    avr_cycle_count_t born, marked; /* cycle of the last start, of the last mark */
    int line;
    uint8_t pending[4096];
    size_t pending_n;
    uint64_t sent;
    int running, over;
} mcu;

static void die(const char *what)
{
    fprintf(stderr, "mcu: %s%s%s\n", what, errno ? ": " : "", errno ? strerror(errno) : "");
    exit(2);
}

/* ---- waveform -------------------------------------------------------------------------------------------- */

static uint32_t to_units(double mv) { return (uint32_t)(mv * UNITS_A_MV + 0.5); }

static void load_waveform(const char *path)
{
    FILE *file = fopen(path, "r");
    size_t room = 0;
    double ms, forward_mv, reflected_mv;

    if (!file)
        die(path);
    while (fscanf(file, "%lf %lf %lf", &ms, &forward_mv, &reflected_mv) == 3) {
        if (mcu.steps_n == room) {
            room = room ? 2 * room : 64;
            mcu.steps = realloc(mcu.steps, room * sizeof *mcu.steps);
            if (!mcu.steps)
                die("waveform");
        }
        mcu.steps[mcu.steps_n++] = (struct step){ms, to_units(forward_mv), to_units(reflected_mv)};
    }
    errno = 0;
    if (!feof(file))
        die("waveform: a line is not `ms forward_mv reflected_mv`");
    fclose(file);
}

/* Called when a conversion starts: that is when a converter takes its sample. */
static void on_conversion(avr_irq_t *irq, uint32_t value, void *param)
{
    double ms = (double)(mcu.avr->cycle - mcu.born) / CYCLES_A_MS;
    uint32_t forward = 0, reflected = 0;

    (void)irq, (void)value, (void)param;
    if (mcu.conversions < CONVERSIONS_TOLD) {
        ++mcu.conversions;
        printf("conversion %.6f\n", ms);
    }
    while (mcu.step < mcu.steps_n && mcu.steps[mcu.step].ms <= ms)
        ++mcu.step;
    if (mcu.step > 0) {
        forward = mcu.steps[mcu.step - 1].forward;
        reflected = mcu.steps[mcu.step - 1].reflected;
    }
    avr_raise_irq(mcu.adc + ADC_IRQ_ADC0 + asked.forward_input, forward);
    avr_raise_irq(mcu.adc + ADC_IRQ_ADC0 + asked.reflected_input, reflected);
}

/* ---- serial line ----------------------------------------------------------------------------------------- */

static void on_byte(avr_irq_t *irq, uint32_t value, void *param)
{
    (void)irq, (void)param;
    if (mcu.pending_n == sizeof mcu.pending)
        die("more bytes in a millisecond than a serial line can carry");
    mcu.pending[mcu.pending_n++] = (uint8_t)value;
}

/* The simulator counts eleven bits a character; 8N1 has ten. */
static void set_character_time(void)
{
    const uint8_t *data = mcu.avr->data;
    unsigned divisor = (data[UBRR0L] | data[UBRR0H] << 8) + 1;
    avr_cycle_count_t bit = divisor * (data[UCSR0A] & U2X0 ? 8UL : 16UL);

    if (mcu.uart->cycles_per_byte != 10 * bit && divisor > 1)
        printf("baud %lu\n", (unsigned long)(HZ / bit));
    mcu.uart->cycles_per_byte = 10 * bit;
}

static void open_line(void)
{
    struct termios raw;
    int reader; /* kept open, so that the line outlives its readers */
    char path[128];

    if (openpty(&mcu.line, &reader, path, NULL, NULL) != 0)
        die("openpty");
    if (tcgetattr(reader, &raw) != 0)
        die("tcgetattr");
    cfmakeraw(&raw);
    if (tcsetattr(reader, TCSANOW, &raw) != 0 || fcntl(mcu.line, F_SETFL, O_NONBLOCK) != 0)
        die("raw line");
    printf("pty %s\n", path);
}

/* ---- commands and waiting -------------------------------------------------------------------------------- */

static double simulated_ms(void) { return (double)mcu.avr->cycle / CYCLES_A_MS; }

static void reset(void)
{
    avr_reset(mcu.avr);
    mcu.avr->data[MCUSR] = EXTRF;
    mcu.born = mcu.avr->cycle;
    mcu.step = 0;
    mcu.conversions = 0;
    printf("reset %.3f\n", simulated_ms());
}

static void obey(const char *command)
{
    if (!strcmp(command, "run"))
        mcu.running = 1;
    else if (!strcmp(command, "reset"))
        reset();
    else if (!strcmp(command, "quit"))
        mcu.over = 1;
    else
        fprintf(stderr, "mcu: unknown command %s (run, reset, quit)\n", command);
}

static void read_commands(void)
{
    static char text[256];
    static size_t used;
    ssize_t got = read(STDIN_FILENO, text + used, sizeof text - 1 - used);
    char *end;

    if (got <= 0) {
        mcu.over = 1;
        return;
    }
    used += (size_t)got;
    text[used] = 0;
    while ((end = strchr(text, '\n'))) {
        *end = 0;
        obey(text);
        used -= (size_t)(end + 1 - text);
        memmove(text, end + 1, used + 1);
    }
    if (used == sizeof text - 1)
        used = 0;
}

/* Wait for a command, or for room on the line, or for the time given; obey what comes. */
static void listen_for(int timeout_ms, int want_room)
{
    struct pollfd ready[2] = {{STDIN_FILENO, POLLIN, 0}, {want_room ? mcu.line : -1, POLLOUT, 0}};

    if (poll(ready, 2, timeout_ms) < 0 && errno != EINTR)
        die("poll");
    if (ready[0].revents)
        read_commands();
}

static void flush_line(void)
{
    size_t done = 0;

    while (done < mcu.pending_n && !mcu.over) {
        ssize_t n = write(mcu.line, mcu.pending + done, mcu.pending_n - done);
        if (n > 0) {
            done += (size_t)n;
            mcu.sent += (size_t)n;
        } else if (errno == EAGAIN) {
            listen_for(PATIENCE_MS, 1);
        } else {
            die("write to the line");
        }
    }
    mcu.pending_n = 0;
}

/* Let the wall clock catch up; after a stall begin anew, do not race. */
static void keep_pace(void)
{
    static int64_t lead; /* simulated minus real, ns */
    struct timespec t;
    int64_t now, ahead;

    clock_gettime(CLOCK_MONOTONIC, &t);
    now = t.tv_sec * 1000 * NS_A_MS + t.tv_nsec;
    ahead = (int64_t)(mcu.avr->cycle * 125 / 2) - lead - now; /* 62.5 ns a cycle */
    if (lead == 0 || ahead < -LONGEST_LAG_NS) {
        lead += ahead;
    } else if (ahead > NS_A_MS) {
        struct timespec nap = {0, ahead < PATIENCE_MS * NS_A_MS ? ahead : PATIENCE_MS * NS_A_MS};
        nanosleep(&nap, NULL);
    }
}

/* ---- the chip -------------------------------------------------------------------------------------------- */

/* The firmware writes 1 to GPIOR0 before what is to be measured and 2 after. */
static void on_mark(avr_t *avr, avr_io_addr_t addr, uint8_t value, void *param)
{
    (void)param;
    avr->data[addr] = value;
    if (value == 1)
        mcu.marked = avr->cycle;
    else if (value == 2)
        printf("cycles %llu\n", (unsigned long long)(avr->cycle - mcu.marked));
}

static void no_sleep(avr_t *avr, avr_cycle_count_t cycles)
{
    (void)avr, (void)cycles; /* a nap of the chip costs the host nothing */
}

static void log_to_stderr(avr_t *avr, const int level, const char *format, va_list values)
{
    if (avr && level <= avr->log)
        vfprintf(stderr, format, values);
}

static avr_io_t *part(const char *kind)
{
    avr_io_t *io = mcu.avr->io_port;

    while (io && strcmp(io->kind, kind))
        io = io->next;
    if (!io)
        die(kind);
    return io;
}

/* All voltages the converter compares are in its finer units, the internal reference too. */
static void set_voltages(void)
{
    avr_adc_t *adc = (avr_adc_t *)part("adc");
    size_t i;

    mcu.avr->vcc = mcu.avr->avcc = SUPPLY_MV * UNITS_A_MV;
    mcu.avr->aref = AREF_MV * UNITS_A_MV;
    for (i = 0; i < sizeof adc->ref_values / sizeof *adc->ref_values; ++i)
        if (adc->ref_values[i] == ADC_VREF_V110)
            adc->ref_values[i] = ADC_VREF_V110 * UNITS_A_MV;
}

static void power_up(void)
{
    elf_firmware_t firmware = {0};
    avr_t *avr = mcu.avr = avr_make_mcu_by_name("atmega328p");

    if (!avr || elf_read_firmware(asked.elf, &firmware) != 0)
        die(asked.elf);
    avr_global_logger_set(log_to_stderr);
    avr_init(avr);
    avr->log = LOG_ERROR;
    avr->frequency = HZ;
    avr->sleep = no_sleep;
    avr->run_cycle_limit = CYCLES_A_MS;
    avr_load_firmware(avr, &firmware);
    set_voltages();
    mcu.uart = (avr_uart_t *)part("uart");
    mcu.uart->flags = 0;
    mcu.adc = avr_io_getirq(avr, AVR_IOCTL_ADC_GETIRQ, 0);
    avr_irq_register_notify(mcu.adc + ADC_IRQ_OUT_TRIGGER, on_conversion, NULL);
    avr_irq_register_notify(avr_io_getirq(avr, AVR_IOCTL_UART_GETIRQ('0'), UART_IRQ_OUTPUT), on_byte, NULL);
    avr_register_io_write(avr, GPIOR0, on_mark, NULL);
    avr->data[MCUSR] = (uint8_t)asked.cause;
}

static void run_a_millisecond(void)
{
    static avr_cycle_count_t until;

    until += CYCLES_A_MS;
    while (mcu.avr->cycle < until) {
        int state = avr_run(mcu.avr);
        if (state == cpu_Done || state == cpu_Crashed)
            die("the firmware stopped or crashed");
    }
    set_character_time();
}

static void live(void)
{
    while (!mcu.over) {
        listen_for(mcu.running ? 0 : PATIENCE_MS, 0);
        if (!mcu.running || mcu.over)
            continue;
        run_a_millisecond();
        flush_line();
        if (asked.reset_ms > 0 && simulated_ms() >= asked.reset_ms) {
            asked.reset_ms = 0;
            reset();
        }
        if (asked.stop_ms > 0 && simulated_ms() >= asked.stop_ms)
            break;
        if (asked.paced)
            keep_pace();
    }
    printf("end %.3f %llu\n", simulated_ms(), (unsigned long long)mcu.sent);
}

static void linger(void)
{
    int waited_ms;

    for (waited_ms = 0; !mcu.over && waited_ms < LONGEST_LINGER_MS; waited_ms += PATIENCE_MS)
        listen_for(PATIENCE_MS, 0);
}

/* ---- command line ---------------------------------------------------------------------------------------- */

static const char usage[] =
    "usage: mcu [--waveform FILE] [--stop-after MS] [--reset-after MS] [--cause BITS] [--paced] [--hold]\n"
    "           [--forward-input N] [--reflected-input N] FIRMWARE.elf\n";

static void read_options(int argc, char **argv)
{
    static const struct option options[] = {
        {"waveform", 1, 0, 'w'}, {"stop-after", 1, 0, 's'}, {"reset-after", 1, 0, 'z'}, {"cause", 1, 0, 'c'},
        {"paced", 0, 0, 'p'}, {"hold", 0, 0, 'h'}, {"forward-input", 1, 0, 'f'}, {"reflected-input", 1, 0, 'r'},
        {0, 0, 0, 0}};
    int option;

    while ((option = getopt_long(argc, argv, "", options, NULL)) != -1)
        switch (option) {
        case 'w': asked.waveform = optarg; break;
        case 's': asked.stop_ms = atof(optarg); break;
        case 'z': asked.reset_ms = atof(optarg); break;
        case 'c': asked.cause = atoi(optarg); break;
        case 'p': asked.paced = 1; break;
        case 'h': asked.held = 1; break;
        case 'f': asked.forward_input = atoi(optarg) & 7; break;
        case 'r': asked.reflected_input = atoi(optarg) & 7; break;
        default: optind = argc; break;
        }
    if (optind + 1 != argc) {
        fputs(usage, stderr);
        exit(2);
    }
    asked.elf = argv[optind];
}

int main(int argc, char **argv)
{
    setvbuf(stdout, NULL, _IOLBF, 0);
    read_options(argc, argv);
    if (asked.waveform)
        load_waveform(asked.waveform);
    power_up();
    open_line();
    mcu.running = !asked.held;
    live();
    linger();
    return 0;
}
