/* The instrument side of a pseudo-terminal, for benchmarks/response.py and others: a very small machine that paces
 * rows at a given rate on one or more ptys, obeys the motion commands of the benchmark's frame card on the first, and
 * after "go" now and then sends two rows above the limit on each pty and times the STOP. The same program in Python:
 * benchmarks/instrument.py. The ptys behind the first get rows only from 2 ms before each of their events until its
 * answer, so that the floors do not eat the processors of what is measured; with SPACING_S 0 they always get rows.
 * Single thread, SCHED_FIFO where permitted, waits in ppoll: it never spins.
 *
 * instrument STREAMS RATE_HZ STIFFNESS_N_MM GAP_MM ZERO_N NOISE_N OVER_N SPACING_S ANSWERS
 * standard output: the names of the slaves, one a line; then "done" when every stream has its events.
 * standard input:  "go N" begins N events a stream; end of file ends the program.
 * ANSWERS, text:   "E stream latency_ns" event answered, measured from before the write of the deciding row to after
 *                  the read of the STOP; "M stream 0" not answered within 1 s; "S stream monotonic_ns" a STOP that no
 *                  event asked for.
 */
#define _GNU_SOURCE
#include <errno.h>
#include <fcntl.h>
#include <math.h>
#include <poll.h>
#include <pty.h>
#include <sched.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/mman.h>
#include <sys/prctl.h>
#include <termios.h>
#include <time.h>
#include <unistd.h>

#define STREAMS_MAX 4
#define ANSWER_NS 1000000000LL
#define WARM_NS 2000000LL /* rows of the streams behind the first begin so long before their event */

typedef struct {
    int master;
    long long due_ns, next_event_ns, asked_ns;
    int over_left;
    long asked, answered, missed;
    char line[256];
    int line_bytes;
} Stream;

static Stream streams[STREAMS_MAX];
static int count;
static double rate_hz, stiffness, gap_mm, zero_n, noise_n, over_n, spacing_s;
static double at_mm, speed_mm_s;
static long events;
static unsigned long counter[STREAMS_MAX];
static FILE *answers;
static uint64_t dice = 88172645463325252ULL;

static long long now_ns(void) {
    struct timespec now;
    clock_gettime(CLOCK_MONOTONIC, &now);
    return now.tv_sec * 1000000000LL + now.tv_nsec;
}

static double uniform(void) {
    dice ^= dice << 13, dice ^= dice >> 7, dice ^= dice << 17;
    return (double)(dice >> 11) / 9007199254740992.0;
}

static double noise(void) { /* sum of four: near enough to a bell */
    return (uniform() + uniform() + uniform() + uniform() - 2.0) * 1.7320508;
}

static void put(Stream *stream, const char *data, int bytes) {
    if (write(stream->master, data, bytes) < 0) return; /* nobody reads: a machine goes on regardless */
}

static void obey(int number, const char *line, long long at_ns) {
    Stream *stream = &streams[number];
    if (!strcmp(line, "S")) {
        if (stream->asked_ns) {
            fprintf(answers, "E %d %lld\n", number, at_ns - stream->asked_ns);
            stream->asked_ns = 0, stream->answered++;
        } else {
            fprintf(answers, "S %d %lld\n", number, at_ns);
        }
        if (!events) speed_mm_s = 0.0; /* while events go on the crosshead runs on: the bench is armed again */
        if (number == 0) put(stream, "OK S\r\n", 6);
    } else if (line[0] == 'V') {
        speed_mm_s = atof(line + 1) / 60.0;
        put(stream, "OK V\r\n", 6);
    } else if (line[0] == 'K') {
        put(stream, "OK K\r\n", 6);
    } else if (line[0] == '?') {
        if (speed_mm_s != 0.0) put(stream, "ST=RM\r\n", 7);
        else put(stream, "ST=R\r\n", 6);
    }
}

static void hear(int number, long long at_ns) {
    Stream *stream = &streams[number];
    char data[512];
    ssize_t got = read(stream->master, data, sizeof data);
    at_ns = at_ns ? at_ns : now_ns();
    for (ssize_t i = 0; i < got; i++) {
        if (data[i] == '\n' || data[i] == '\r') {
            stream->line[stream->line_bytes] = 0;
            if (stream->line_bytes) obey(number, stream->line, at_ns);
            stream->line_bytes = 0;
        } else if (stream->line_bytes < (int)sizeof stream->line - 1) {
            stream->line[stream->line_bytes++] = data[i];
        }
    }
}

static void row(int number) {
    Stream *stream = &streams[number];
    int idle = !events || (!stream->asked_ns && stream->due_ns < stream->next_event_ns - WARM_NS);
    if (number && idle && spacing_s > 0) return;
    char text[64];
    double into_mm = at_mm - gap_mm;
    double force = zero_n + noise_n * noise() + (into_mm > 0 ? stiffness * into_mm : 0.0);
    int deciding = 0;
    if (events && !stream->asked_ns && !stream->over_left && stream->asked < events
        && stream->due_ns >= stream->next_event_ns)
        stream->over_left = 2;
    if (stream->over_left) {
        force = over_n;
        deciding = --stream->over_left == 0;
    }
    int bytes = snprintf(text, sizeof text, "D%lu,%ld,%ld,", counter[number]++ % 65536, lround(force / 0.016),
                         lround(at_mm / 0.00001));
    unsigned sum = 0;
    for (int i = 0; i < bytes - 1; i++) sum += (unsigned char)text[i];
    bytes += snprintf(text + bytes, sizeof text - bytes, "%02X\r\n", sum & 0xFF);
    if (deciding) {
        stream->asked++;
        stream->asked_ns = now_ns();
        stream->next_event_ns = stream->due_ns + (long long)(spacing_s * (0.8 + 0.4 * uniform()) * 1e9);
    }
    put(stream, text, bytes);
}

static int finished(long long at_ns) {
    int left = 0;
    for (int i = 0; i < count; i++) {
        Stream *stream = &streams[i];
        if (stream->asked_ns && at_ns - stream->asked_ns > ANSWER_NS) {
            fprintf(answers, "M %d 0\n", i);
            stream->asked_ns = 0, stream->missed++;
        }
        left |= stream->asked < events || stream->asked_ns;
    }
    return !left;
}

static void begin(long wanted) {
    events = wanted;
    for (int i = 0; i < count; i++) {
        streams[i].asked = streams[i].answered = streams[i].missed = 0;
        streams[i].next_event_ns = now_ns() + (long long)(spacing_s * (1.0 + (double)i / count) * 1e9);
    }
}

static void open_streams(void) {
    for (int i = 0; i < count; i++) {
        int slave;
        struct termios raw;
        if (openpty(&streams[i].master, &slave, NULL, NULL, NULL)) exit(2);
        tcgetattr(slave, &raw);
        cfmakeraw(&raw);
        tcsetattr(slave, TCSANOW, &raw); /* the slave stays open here, so that readers may come and go */
        fcntl(streams[i].master, F_SETFL, O_NONBLOCK);
        printf("%s\n", ttyname(slave));
    }
    fflush(stdout);
}

int main(int argc, char **argv) {
    if (argc != 10) return 2;
    count = atoi(argv[1]), rate_hz = atof(argv[2]), stiffness = atof(argv[3]), gap_mm = atof(argv[4]);
    zero_n = atof(argv[5]), noise_n = atof(argv[6]), over_n = atof(argv[7]), spacing_s = atof(argv[8]);
    answers = fopen(argv[9], "w");
    if (!answers || count > STREAMS_MAX) return 2;
    setvbuf(answers, NULL, _IOFBF, 1 << 20);
    open_streams();
    struct sched_param priority = {.sched_priority = 30};
    sched_setscheduler(0, SCHED_FIFO, &priority); /* not permitted: goes on as it is */
    mlockall(MCL_CURRENT | MCL_FUTURE);
    prctl(PR_SET_TIMERSLACK, 1, 0, 0, 0);
    long long period_ns = (long long)(1e9 / rate_hz), first_ns = now_ns();
    for (int i = 0; i < count; i++) streams[i].due_ns = first_ns + i * period_ns / count;
    struct pollfd polls[STREAMS_MAX + 1];
    for (int i = 0; i < count; i++) polls[i] = (struct pollfd){streams[i].master, POLLIN, 0};
    polls[count] = (struct pollfd){0, POLLIN, 0};
    for (;;) {
        int next = 0;
        for (int i = 1; i < count; i++)
            if (streams[i].due_ns < streams[next].due_ns) next = i;
        long long wait_ns = streams[next].due_ns - now_ns();
        struct timespec wait = {wait_ns > 0 ? wait_ns / 1000000000LL : 0, wait_ns > 0 ? wait_ns % 1000000000LL : 0};
        int ready = ppoll(polls, count + 1, &wait, NULL);
        for (int i = 0; ready > 0 && i < count; i++)
            if (polls[i].revents & POLLIN) hear(i, 0);
        if (ready > 0 && polls[count].revents) {
            char word[64];
            ssize_t got = read(0, word, sizeof word - 1);
            if (got <= 0) break;
            word[got] = 0;
            if (!strncmp(word, "go ", 3)) begin(atol(word + 3));
        }
        if (now_ns() < streams[next].due_ns) continue;
        row(next);
        if (next == 0) at_mm += speed_mm_s / rate_hz;
        streams[next].due_ns += period_ns;
        if (next == 0 && events && finished(now_ns())) {
            events = 0;
            fflush(answers);
            printf("done\n");
            fflush(stdout);
        }
        if (next == 0 && counter[0] % 512 == 0) fflush(answers);
    }
    fclose(answers);
    return 0;
}
