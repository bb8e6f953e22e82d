/*
 * Watches every access of a routine to some pages (Linux on x86-64).
 *
 * The pages are made inaccessible. An access then raises SIGSEGV: it is recorded, its page is
 * opened, and the processor is told to trap after that one instruction; the trap closes the page
 * again. Used by the bench in a child process that runs nothing else.
 */
#define _GNU_SOURCE
#include <signal.h>
#include <stddef.h>
#include <stdint.h>
#include <sys/mman.h>
#include <ucontext.h>
#include <unistd.h>

#define PAGE 4096u
#define MOST_RANGES 8
#define MOST_OPEN 16
#define TRAP_FLAG 0x100
#define WRITE_ACCESS 2

static struct {
    uintptr_t first, last;
} ranges[MOST_RANGES];
static int range_count;
static uintptr_t opened[MOST_OPEN];
static int open_count;
static uint64_t *record; /* pairs: address, 1 for a write */
static int64_t used, room;

static int watched(uintptr_t address)
{
    for (int i = 0; i < range_count; i++) {
        if (address >= ranges[i].first && address < ranges[i].last) {
            return 1;
        }
    }
    return 0;
}

static void on_fault(int number, siginfo_t *info, void *context)
{
    ucontext_t *machine = (ucontext_t *)context;
    const uintptr_t address = (uintptr_t)info->si_addr;
    if (!watched(address) || open_count == MOST_OPEN) {
        signal(number, SIG_DFL); /* not ours: let it end the process */
        return;
    }
    if (used < room) {
        record[2 * used] = address;
        record[2 * used + 1] = (machine->uc_mcontext.gregs[REG_ERR] & WRITE_ACCESS) != 0;
    }
    used++;
    opened[open_count] = address / PAGE * PAGE;
    mprotect((void *)opened[open_count], PAGE, PROT_READ | PROT_WRITE);
    open_count++;
    machine->uc_mcontext.gregs[REG_EFL] |= TRAP_FLAG;
}

static void on_trap(int number, siginfo_t *info, void *context)
{
    ucontext_t *machine = (ucontext_t *)context;
    (void)number;
    (void)info;
    while (open_count > 0) {
        open_count--;
        mprotect((void *)opened[open_count], PAGE, PROT_NONE);
    }
    machine->uc_mcontext.gregs[REG_EFL] &= ~TRAP_FLAG;
}

/* Begins to watch: first and last address of each range, whole pages; room for the record. */
int watch_begin(const uint64_t *bounds, int count, uint64_t *where, int64_t pairs)
{
    struct sigaction fault = {0}, trap = {0};
    if (count > MOST_RANGES || sysconf(_SC_PAGESIZE) != (long)PAGE) {
        return -1;
    }
    record = where;
    room = pairs;
    used = 0;
    range_count = count;
    fault.sa_sigaction = on_fault;
    fault.sa_flags = SA_SIGINFO | SA_NODEFER;
    trap.sa_sigaction = on_trap;
    trap.sa_flags = SA_SIGINFO;
    if (sigaction(SIGSEGV, &fault, NULL) != 0 || sigaction(SIGTRAP, &trap, NULL) != 0) {
        return -1;
    }
    for (int i = 0; i < count; i++) {
        ranges[i].first = (uintptr_t)bounds[2 * i];
        ranges[i].last = (uintptr_t)bounds[2 * i + 1];
        mprotect((void *)ranges[i].first, ranges[i].last - ranges[i].first, PROT_NONE);
    }
    return 0;
}

/* Ends watching and opens the pages; gives the number of accesses, recorded or not. */
int64_t watch_end(void)
{
    for (int i = 0; i < range_count; i++) {
        mprotect((void *)ranges[i].first, ranges[i].last - ranges[i].first,
                 PROT_READ | PROT_WRITE);
    }
    range_count = 0;
    signal(SIGSEGV, SIG_DFL);
    signal(SIGTRAP, SIG_DFL);
    return used;
}
