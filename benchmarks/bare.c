/* The floor in C: reads rows from a descriptor, decides on the same bytes (force in the second field, two in a row
 * above the limit), writes STOP. bare DEVICE LIMIT_COUNTS. The same in Python: benchmarks/bare.py.
 */
#define _GNU_SOURCE
#include <fcntl.h>
#include <sched.h>
#include <stdlib.h>
#include <string.h>
#include <sys/mman.h>
#include <sys/prctl.h>
#include <sys/select.h>
#include <unistd.h>

int main(int argc, char **argv) {
    char data[8192];
    size_t held = 0;
    int outside = 0;
    if (argc != 3) return 2;
    int device = open(argv[1], O_RDWR | O_NOCTTY | O_NONBLOCK);
    long limit = atol(argv[2]);
    if (device < 0) return 2;
    struct sched_param priority = {.sched_priority = 10};
    sched_setscheduler(0, SCHED_FIFO, &priority);
    mlockall(MCL_CURRENT | MCL_FUTURE);
    prctl(PR_SET_TIMERSLACK, 1, 0, 0, 0);
    for (;;) {
        fd_set ready;
        FD_ZERO(&ready);
        FD_SET(device, &ready);
        if (select(device + 1, &ready, NULL, NULL, NULL) < 0) return 1;
        ssize_t got = read(device, data + held, sizeof data - 1 - held);
        if (got <= 0) return 0;
        held += got;
        data[held] = 0;
        char *line = data, *end;
        while ((end = memchr(line, '\n', data + held - line))) {
            char *comma = memchr(line, ',', end - line);
            if (comma) {
                outside = atol(comma + 1) > limit ? outside + 1 : 0;
                if (outside == 2 && write(device, "S\r\n", 3) != 3) return 1;
            }
            line = end + 1;
        }
        held = data + held - line;
        memmove(data, line, held);
        if (held == sizeof data - 1) held = 0;
    }
}
