/* A driver for hardware in one C file: copy it, fill in the three places marked FILL IN, set the numbers of your arm.

     gcc -std=c11 -Wall -Wextra -O2 -o driver template.c -lzmq

   As it stands it moves a toy: a pure inertia with a brake. `./driver --demo` publishes its states and obeys torque messages,
   with the whole duty of WIRE.md, the text beside this file. It needs libc and libzmq only; where libzmq comes without a header
   (pyzmq brings the library alone) add -DRTCTL_NO_ZMQ_HEADER, see WIRE.md. On hardware start it as chrt -f 60 ./driver
   Where to start reading: FILL IN 1 to 3, then run() near the end (the bus cycle), then judge() and step() (every rule).

   This is not a safety-rated control. Before the first torque on hardware: drive limits set low, brakes tested, the hardware
   emergency stop within reach and tried, nobody in the arm's reach; the risk assessment and applicable standards come first. */

#define _GNU_SOURCE
#include <err.h>
#include <fcntl.h>
#include <inttypes.h>
#include <math.h>
#include <signal.h>
#include <stdbool.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/file.h>
#include <sys/random.h>
#include <sys/stat.h>
#include <time.h>
#include <unistd.h>
#ifndef RTCTL_NO_ZMQ_HEADER
#include <zmq.h>
#else /* the few names used here, as libzmq 4 has them */
enum { ZMQ_PUB = 1, ZMQ_PULL = 7, ZMQ_DONTWAIT = 1 };
enum { ZMQ_RCVMORE = 13, ZMQ_LINGER = 17, ZMQ_MAXMSGSIZE = 22, ZMQ_SNDHWM = 23, ZMQ_RCVHWM = 24 };
void *zmq_ctx_new(void), *zmq_socket(void *context, int kind);
int zmq_close(void *socket), zmq_ctx_term(void *context), zmq_bind(void *socket, const char *endpoint), zmq_errno(void);
int zmq_setsockopt(void *socket, int option, const void *value, size_t size);
int zmq_getsockopt(void *socket, int option, void *value, size_t *size);
int zmq_recv(void *socket, void *buffer, size_t size, int flags), zmq_send(void *, const void *buffer, size_t size, int flags);
const char *zmq_strerror(int number);
#endif

enum { ENABLED = 1, BRAKE = 2, FAULT = 4, STOP_CHAIN_CLOSED = 8, GRAVITY_ADDED = 16, SIMULATED_BIT = 32 }; /* status bits */
enum { ASK = 0, DRIVE = 1, RELEASE = 2 };                                                                  /* requests */
enum { MESSAGE_MAX = 1024, HISTORY = 256, DRAIN_MAX = 64 }; /* bytes, states whose sample time is remembered, messages */
#define MS ((int64_t)1000000)                               /* ns */

/* ---- your arm: the same names, order and units as in its arm file; numbers from the data sheets -------------------------- */

#define N 1 /* joints, 1 to 16 */
/* Arm name, then for each joint its name and unit (rad or m): printf 'toy\njoint1 rad' | sha256sum | cut -c1-12 */
#define ARM_KEY UINT64_C(0x4060dcdc012e)
static const double TAU_MAX[N] = {20.0};         /* N m (N), the driver's own limit: torque beyond it is refused */
static const double QD_MAX[N] = {6.0};           /* rad/s (m/s), the driver's own limit: beyond it the grant ends */
static const double STILL_QD[N] = {0.02};        /* rad/s (m/s), up to it a joint is still */
static const double REST_DAMPING[N] = {4.0};     /* N m s/rad (N s/m), moving part of the rest policy */
static const int64_t REST_MOVING_NS = 2000 * MS; /* after this time the brakes close even if a joint still moves */
static const bool HAS_BRAKE = true; /* still part: brakes; false: no torque (an arm that gravity does not move) */
static const int64_t BRAKE_OPEN_NS = 30 * MS, BRAKE_CLOSE_NS = 50 * MS; /* until an opened brake is free, a closed one holds */
static const int64_t VALID_MAX_NS = 20 * MS;                            /* a torque counts so long at most, from its sample */
static const int64_t SILENT_MAX_NS = 200 * MS; /* a holder that has not driven yet and is silent for longer loses the grant */
static const int64_t STILL_DWELL_NS = 50 * MS, PERIOD_NS = 1 * MS;
static const bool SIMULATED = true; /* false on hardware: `--demo` is then refused */
static const char *const STATE_NAME = "toy-state", *const TORQUE_NAME = "toy-torque"; /* of the sockets, as in the run file */

static int64_t start_ns;
static int64_t now(void) { /* ns since the driver's start: counters end at 2^53, which are 104 days, and computers run longer */
    struct timespec t;
    clock_gettime(CLOCK_MONOTONIC, &t);
    return (int64_t)t.tv_sec * 1000000000 + t.tv_nsec - start_ns;
}

/* The three places to fill in. Positive torque accelerates positive motion; all values are on the link side of the gear. */
static struct { double q[N], qd[N], tau[N]; bool braked; int64_t last_ns; } toy = {.braked = true};

/* FILL IN 1: q, qd and measured torque; *tau_count = N, or 0 if the drives measure none. Returns the drives' status bits
   ENABLED, FAULT, STOP_CHAIN_CLOSED, GRAVITY_ADDED. If the bus does not answer: q = NAN and FAULT; torque then ends. */
static uint64_t read_joints(double q[N], double qd[N], double tau[N], int *tau_count) {
    int64_t now_ns = now();
    double dt_s = 1e-9 * (double)(now_ns - toy.last_ns);
    toy.last_ns = now_ns;
    for (int i = 0; i < N; i++) {
        toy.qd[i] = toy.braked ? 0.0 : toy.qd[i] + dt_s * toy.tau[i] / 0.5; /* a toy: 0.5 kg m^2 and nothing else */
        toy.q[i] += dt_s * toy.qd[i];
        q[i] = toy.q[i], qd[i] = toy.qd[i], tau[i] = toy.tau[i];
    }
    *tau_count = N;
    return ENABLED | STOP_CHAIN_CLOSED;
}

/* FILL IN 2: hand the torques to the drives, N m (N). Called in every bus cycle: set the drives' own time-out to a few cycles,
   so that they close the brakes by themselves when this program dies. */
static void write_torques(const double tau[N]) {
    memcpy(toy.tau, tau, sizeof toy.tau);
}

/* FILL IN 3: close or open the brakes of all joints. Called in every bus cycle. */
static void set_brake(bool closed) {
    toy.braked = closed;
}

/* ---- messages: nothing below needs a change ------------------------------------------------------------------------------ */

typedef enum { COUNTS, LENGTH, FORM, VERSION, CRC, TAU, IDENTITY, HOLDER, SEQUENCE, FLOOD, REQUEST, GRANT, ANSWER, AGE, LIMIT,
               REASONS } Reason; /* whether a message counts, or why not */
static const char *const REASON[REASONS] = {"counts", "length", "form", "version", "crc", "length of tau", "identity", "holder",
    "sequence", "flooded", "request", "grant", "answered state", "age", "limit"};

typedef struct { uint64_t key, session, sequence, driver_session, answered, grant, request, valid_ns; double tau[N]; } Torque;
typedef struct { const uint8_t *at, *end; bool bad; } Reader;      /* once bad it stays bad, and gives zeros */
typedef struct { uint8_t data[MESSAGE_MAX]; size_t size; } Writer; /* a state of 16 joints needs 571 bytes */

static uint64_t crc32_of(const uint8_t *data, size_t size) { /* IEEE 802.3, as in zlib */
    uint32_t crc = 0xffffffff;
    for (size_t k = 0; k < size; k++) {
        crc ^= data[k];
        for (int bit = 0; bit < 8; bit++) crc = crc & 1 ? (crc >> 1) ^ 0xedb88320 : crc >> 1;
    }
    return crc ^ 0xffffffff;
}

static uint64_t take(Reader *r, int width) { /* `width` bytes, big-endian */
    uint64_t value = 0;
    r->bad = r->bad || r->end - r->at < width;
    for (int k = 0; k < width && !r->bad; k++) value = value << 8 | *r->at++;
    return value;
}

/* The integer that begins with the byte `first`, in any form; if it is negative, *negative is set and it wraps. */
static uint64_t take_integer(Reader *r, uint64_t first, bool *negative) {
    *negative = first >= 0xe0;
    if (first < 0x80 || first >= 0xe0) return *negative ? first - 256 : first; /* fixint */
    if (first < 0xcc || first > 0xd3) return r->bad = true, 0;
    int width = 1 << ((first - 0xcc) & 3); /* from 0xcc: unsigned, 8 to 64 bits; from 0xd0: signed */
    uint64_t value = take(r, width);
    *negative = first >= 0xd0 && value >> (8 * width - 1);
    return *negative && width < 8 ? value - (UINT64_C(1) << 8 * width) : value;
}

static uint64_t take_counter(Reader *r) {
    bool negative;
    uint64_t value = take_integer(r, take(r, 1), &negative);
    r->bad = r->bad || negative || value >> 53; /* counters end at 2^53 */
    return value;
}

static double take_number(Reader *r) {
    bool negative;
    uint64_t first = take(r, 1);
    if (first == 0xcb) return (union { uint64_t bits; double value; }){take(r, 8)}.value;
    if (first == 0xca) return (union { uint32_t bits; float value; }){(uint32_t)take(r, 4)}.value;
    uint64_t value = take_integer(r, first, &negative);
    return negative ? -(double)-value : (double)value;
}

static uint64_t take_array(Reader *r) { /* its element count */
    uint64_t first = take(r, 1);
    r->bad = r->bad || (first >> 4 != 9 && first != 0xdc);
    return first == 0xdc ? take(r, 2) : first & 15;
}

static Reason read_torque(const uint8_t *data, size_t size, Torque *t) { /* COUNTS, or why it cannot be read */
    if (size < 1 || size > MESSAGE_MAX) return LENGTH;
    Reader r = {data, data + size, false};
    uint64_t count = take_array(&r), version = take_counter(&r), kind;
    if (r.bad || version != 1) return r.bad ? FORM : VERSION;
    uint64_t *fields[] = {&kind, &t->key, &t->session, &t->sequence, &t->driver_session, &t->answered, &t->grant, &t->request,
        &t->valid_ns};
    for (int k = 0; k < 9; k++) *fields[k] = take_counter(&r);
    if (r.bad || count != 12 || kind != 2) return FORM;
    uint64_t joints = take_array(&r);
    for (int i = 0; i < N; i++) t->tau[i] = take_number(&r);
    if (r.bad || joints != N) return TAU;
    size_t covered = (size_t)(r.at - data);
    uint64_t crc = take_counter(&r);
    if (r.bad || r.at != r.end) return FORM;
    return crc == crc32_of(data, covered) ? COUNTS : CRC;
}

static void put(Writer *w, uint64_t value, int width) { /* `width` bytes, big-endian */
    while (width-- > 0) w->data[w->size++] = (uint8_t)(value >> (8 * width));
}

static void put_counter(Writer *w, uint64_t value) { /* smallest form */
    unsigned form = value >> 8 == 0 ? 0 : value >> 16 == 0 ? 1 : value >> 32 == 0 ? 2 : 3;
    put(w, 0xcc + form, value < 0x80 ? 0 : 1);
    put(w, value, 1 << form);
}

static void put_numbers(Writer *w, const double *values, unsigned count) {
    put(w, count < 16 ? 0x90 + count : 0xdc0000 + count, count < 16 ? 1 : 3);
    for (unsigned i = 0; i < count; i++) {
        put(w, 0xcb, 1);
        put(w, (union { double value; uint64_t bits; }){values[i]}.bits, 8);
    }
}

/* ---- duty: grant, age, limits, rest policy, brakes and echo, without socket and clock ------------------------------------ */

typedef enum { MOVING, CLOSING, STILL, DRIVING } Phase; /* the first three: rest policy; the last: the holder's torque */

typedef struct {
    uint64_t session, sequence, holder, grant; /* of this driver; of its last state; who may drive (0: nobody) */
    uint64_t received_session, received_sequence, applied_session, applied_sequence; /* echo */
    uint64_t bits, refused[REASONS];           /* status; counts */
    int64_t sample_ns[HISTORY];                /* of the last states */
    int64_t heard_ns, moved_ns, phase_ns;      /* when the holder was last heard, a joint last moved, the phase began */
    Phase phase;
    bool powered, ended; /* ended: no grant any more */
    double tau[N];       /* last accepted torque */
    int64_t deadline_ns; /* it counts until then */
    bool kept;           /* it bridges the closing brakes */
} Duty;

static bool is_still(const Duty *d, int64_t now_ns) { return now_ns - d->moved_ns >= STILL_DWELL_NS; }
static void set_phase(Duty *d, Phase phase, int64_t now_ns) { d->phase = phase, d->phase_ns = now_ns; }

static void end_grant(Duty *d, int64_t now_ns, bool kept) { /* for good; the rest policy takes over */
    d->holder = 0, d->kept = kept;
    if (d->phase == DRIVING) set_phase(d, MOVING, now_ns);
}

static void check_lapse(Duty *d, int64_t now_ns) {
    bool lapsed = d->phase == DRIVING ? now_ns >= d->deadline_ns : now_ns - d->heard_ns >= SILENT_MAX_NS;
    if (d->holder && lapsed) end_grant(d, now_ns, false);
}

static Reason judge_drive(Duty *d, const Torque *t, int64_t now_ns) {
    if (!d->holder || t->grant != d->grant) return GRANT;
    if (t->answered < 1 || t->answered > d->sequence || d->sequence - t->answered >= HISTORY) return ANSWER;
    int64_t valid_ns = (int64_t)t->valid_ns < VALID_MAX_NS ? (int64_t)t->valid_ns : VALID_MAX_NS;
    int64_t deadline_ns = d->sample_ns[t->answered % HISTORY] + valid_ns;
    if (now_ns >= deadline_ns) return AGE;
    for (int i = 0; i < N; i++)
        if (!(-TAU_MAX[i] <= t->tau[i] && t->tau[i] <= TAU_MAX[i])) return LIMIT; /* also catches not-a-number */
    memcpy(d->tau, t->tau, sizeof d->tau);
    d->deadline_ns = deadline_ns, d->applied_session = t->session, d->applied_sequence = t->sequence;
    if (d->phase != DRIVING) set_phase(d, DRIVING, now_ns);
    return COUNTS;
}

static Reason judge(Duty *d, const Torque *t, int64_t now_ns, bool only_release) {
    if (t->key != ARM_KEY || t->session == 0 || t->driver_session != d->session) return IDENTITY;
    check_lapse(d, now_ns); /* first: a torque that comes too late must not revive its grant */
    if (d->holder && d->holder != t->session) return HOLDER;
    if (t->session == d->received_session && t->sequence <= d->received_sequence) return SEQUENCE;
    if (only_release && t->request != RELEASE) return FLOOD;
    d->received_session = t->session, d->received_sequence = t->sequence, d->heard_ns = now_ns;
    if (t->request == DRIVE) return judge_drive(d, t, now_ns);
    if (t->request == ASK && !d->holder && !d->ended && d->phase == STILL && d->powered && is_still(d, now_ns))
        d->grant++, d->holder = t->session;
    if (t->request == RELEASE && d->holder)
        end_grant(d, now_ns, is_still(d, now_ns)); /* at rest the last torque bridges the closing brakes */
    return t->request > RELEASE ? REQUEST : COUNTS;
}

/* Take one message: COUNTS, or why not. `only_release`: the queue was flooded and nothing else may be used. */
static Reason receive(Duty *d, const uint8_t *data, size_t size, int64_t now_ns, bool only_release) {
    Torque t;
    Reason why = read_torque(data, size, &t);
    if (why == COUNTS) why = judge(d, &t, now_ns, only_release);
    d->refused[why]++;
    return why;
}

/* One bus cycle, from a fresh measurement and the drives' status bits: the torques to write; true if brakes must be closed. */
static bool step(Duty *d, const double q[N], const double qd[N], uint64_t status, int64_t now_ns, double tau[N]) {
    bool usable = (status & (ENABLED | FAULT | STOP_CHAIN_CLOSED)) == (ENABLED | STOP_CHAIN_CLOSED), slow = true;
    for (int i = 0; i < N; i++) {
        usable = usable && isfinite(q[i]) && isfinite(qd[i]);
        slow = slow && fabs(qd[i]) <= QD_MAX[i];
        if (!(fabs(qd[i]) <= STILL_QD[i])) d->moved_ns = now_ns;
    }
    d->powered = usable;
    check_lapse(d, now_ns);
    if (d->holder && !(usable && slow)) end_grant(d, now_ns, false);
    int64_t lasted_ns = now_ns - d->phase_ns;
    if (d->phase == MOVING && (is_still(d, now_ns) || lasted_ns >= REST_MOVING_NS || !usable))
        set_phase(d, HAS_BRAKE ? CLOSING : STILL, now_ns);
    else if (d->phase == CLOSING && lasted_ns >= BRAKE_CLOSE_NS)
        set_phase(d, STILL, now_ns);

    bool holding = HAS_BRAKE && (d->phase == STILL || (d->phase == DRIVING && now_ns - d->phase_ns < BRAKE_OPEN_NS));
    d->bits = (status & (ENABLED | FAULT | STOP_CHAIN_CLOSED | GRAVITY_ADDED)) | (holding ? BRAKE : 0);
    d->bits |= SIMULATED ? SIMULATED_BIT : 0;
    for (int i = 0; i < N; i++) {
        double damping = -REST_DAMPING[i] * qd[i];
        damping = damping > TAU_MAX[i] ? TAU_MAX[i] : damping < -TAU_MAX[i] ? -TAU_MAX[i] : damping;
        tau[i] = d->phase == DRIVING || (d->phase == CLOSING && d->kept) ? d->tau[i] : damping;
        tau[i] = usable && d->phase != STILL ? tau[i] : 0.0;
    }
    return HAS_BRAKE && (d->phase == CLOSING || d->phase == STILL);
}

/* The next state message. `sample_ns` is when q and qd were measured. */
static void write_state(Duty *d, const double *q, const double *qd, const double *tau, int count, int64_t sample_ns, Writer *w) {
    d->sample_ns[++d->sequence % HISTORY] = sample_ns;
    const uint64_t counters[] = {1, 1, ARM_KEY, d->session, d->sequence, (uint64_t)sample_ns, d->holder, d->grant,
        d->received_session, d->received_sequence, d->applied_session, d->applied_sequence, d->bits};
    w->size = 0;
    put(w, 0xdc0012, 3); /* 18 elements */
    for (int k = 0; k < 13; k++) put_counter(w, counters[k]);
    put_numbers(w, q, N), put_numbers(w, qd, N), put_numbers(w, tau, count == N ? N : 0);
    put(w, 0x80, 1); /* no extras */
    put_counter(w, crc32_of(w->data, w->size));
}

/* ---- sockets and time ---------------------------------------------------------------------------------------------------- */

static volatile sig_atomic_t signalled;
static void on_signal(int number) { signalled = number; }

/* A bound socket. One lock per path, held until the process ends: libzmq would take the path over from a running driver. */
static void *bind_socket(void *context, int kind, const char *folder, const char *name) {
    char path[128], lock[136], endpoint[136];
    if (snprintf(path, sizeof path, "%s/%s", folder, name) > 107) errx(3, "%s: must be at most 107 characters long.", path);
    snprintf(lock, sizeof lock, "%s.lock", path);
    snprintf(endpoint, sizeof endpoint, "ipc://%s", path); /* TCP would need keys and a list of clients, see WIRE.md */
    int file = open(lock, O_CREAT | O_RDWR | O_CLOEXEC, 0600), linger = 0, queue = 4;
    if (file < 0) err(3, "%s", lock);
    if (flock(file, LOCK_EX | LOCK_NB)) errx(3, "%s: is in use by another driver. End that one first.", path);
    int64_t size = MESSAGE_MAX;
    void *socket = zmq_socket(context, kind);
    if (!socket || zmq_setsockopt(socket, ZMQ_LINGER, &linger, sizeof linger) ||
        zmq_setsockopt(socket, ZMQ_SNDHWM, &queue, sizeof queue) || zmq_setsockopt(socket, ZMQ_RCVHWM, &queue, sizeof queue) ||
        zmq_setsockopt(socket, ZMQ_MAXMSGSIZE, &size, sizeof size) || zmq_bind(socket, endpoint))
        errx(3, "%s: %s", endpoint, zmq_strerror(zmq_errno()));
    return socket;
}

/* Take what waits, at most DRAIN_MAX parts. If the bound is reached, only a release among them counts. */
static void drain(void *socket, Duty *d) {
    static uint8_t data[DRAIN_MAX][MESSAGE_MAX];
    static int more; /* the next part belongs to the message of the last one */
    size_t sizes[DRAIN_MAX], more_size = sizeof more;
    int parts = 0, count = 0, size;
    for (; parts < DRAIN_MAX && (size = zmq_recv(socket, data[count], MESSAGE_MAX, ZMQ_DONTWAIT)) >= 0; parts++) {
        bool several = more;
        zmq_getsockopt(socket, ZMQ_RCVMORE, &more, &more_size);
        sizes[count] = several ? 0 : (size_t)size; /* size 0 is refused: so is a message of several parts */
        count += !more;
    }
    for (int k = 0; k < count; k++) receive(d, data[k], sizes[k], now(), parts == DRAIN_MAX);
}

static void run(void *states, void *torques, Duty *d) { /* the bus cycle, until a signal and the rest that follows it */
    int64_t deadline_ns = d->phase_ns = d->moved_ns = now();
    while (!(d->ended && d->phase == STILL)) {
        double q[N], qd[N], measured[N], tau[N];
        Writer w;
        int tau_count = 0;
        drain(torques, d);
        int64_t sample_ns = now();
        uint64_t status = read_joints(q, qd, measured, &tau_count);
        if (signalled && d->holder) end_grant(d, sample_ns, is_still(d, sample_ns));
        d->ended = signalled;
        bool closed = step(d, q, qd, status, sample_ns, tau);
        write_torques(tau), set_brake(closed);
        write_state(d, q, qd, measured, tau_count, sample_ns, &w);
        zmq_send(states, w.data, w.size, ZMQ_DONTWAIT);
        int64_t late_ns = now() - deadline_ns; /* late cycles are left out, none are caught up */
        deadline_ns += PERIOD_NS * (late_ns > PERIOD_NS ? (late_ns + PERIOD_NS - 1) / PERIOD_NS : 1);
        struct timespec until = {(start_ns + deadline_ns) / 1000000000, (start_ns + deadline_ns) % 1000000000};
        clock_nanosleep(CLOCK_MONOTONIC, TIMER_ABSTIME, &until, NULL);
    }
}

int main(int argc, char **argv) {
    bool demo = argc > 1 && !strcmp(argv[1], "--demo");
    if (argc > 2 + demo) errx(2, "usage: driver [--demo] [FOLDER OF THE SOCKETS]");
    if (demo != SIMULATED) errx(2, "--demo must be given as long as SIMULATED is true, and only then.");
    const char *runtime = getenv("XDG_RUNTIME_DIR"), *temporary = getenv("TMPDIR");
    char folder[108];
    struct stat info;
    if (argc == 2 + demo) snprintf(folder, sizeof folder, "%s", argv[1 + demo]);
    else if (runtime && *runtime) snprintf(folder, sizeof folder, "%s/rtctl", runtime);
    else snprintf(folder, sizeof folder, "%s/rtctl-%u", temporary && *temporary ? temporary : "/tmp", (unsigned)getuid());
    mkdir(folder, 0700);
    if (lstat(folder, &info) || !S_ISDIR(info.st_mode) || info.st_uid != getuid() || info.st_mode & 077)
        errx(3, "%s: must be a folder only this user can enter. Make one with: mkdir -m 700", folder);

    static Duty duty;
    if (getrandom(&duty.session, sizeof duty.session, 0) != sizeof duty.session) err(3, "random session");
    duty.session = duty.session >> 11 | 1; /* 53 bits, never 0 */
    start_ns = now();
    void *context = zmq_ctx_new();
    void *states = bind_socket(context, ZMQ_PUB, folder, STATE_NAME);
    void *torques = bind_socket(context, ZMQ_PULL, folder, TORQUE_NAME);
    struct sigaction ending = {.sa_handler = on_signal};
    sigaction(SIGINT, &ending, NULL), sigaction(SIGTERM, &ending, NULL), sigaction(SIGHUP, &ending, NULL);
    printf("arm key %" PRIu64 ", states and torques in %s\n", ARM_KEY, folder), fflush(stdout);
    run(states, torques, &duty);
    set_brake(HAS_BRAKE), write_torques((double[N]){0.0});
    printf("messages by verdict:");
    for (int k = 0; k < REASONS; k++)
        if (duty.refused[k]) printf(" %s %" PRIu64, REASON[k], duty.refused[k]);
    printf("\n");
    return zmq_close(states) | zmq_close(torques) | zmq_ctx_term(context);
}
