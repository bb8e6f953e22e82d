/*
 * A plugin for QEMU that counts what one call of a routine does: instructions, and the loads and
 * stores that they make. A call begins at the routine's first instruction and ends at the next
 * one of the code that called it, so that the functions which the routine calls are counted too.
 * Only the first call of each routine counts.
 *
 * Arguments: out=FILE, and any number of routine=ADDRESS and caller=LOW-HIGH, in hexadecimal.
 * The file gets one line a routine: address, instructions, loads, stores.
 *
 * The prototypes are those of the plugin interface, version 1, of QEMU; its header is not needed.
 */
#include <inttypes.h>
#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

typedef uint64_t qemu_plugin_id_t;
typedef uint32_t qemu_plugin_meminfo_t;
typedef struct qemu_info_t qemu_info_t;
struct qemu_plugin_tb;
struct qemu_plugin_insn;
typedef void (*translated_t)(qemu_plugin_id_t, struct qemu_plugin_tb *);
typedef void (*executed_t)(unsigned int, void *);
typedef void (*accessed_t)(unsigned int, qemu_plugin_meminfo_t, uint64_t, void *);

void qemu_plugin_register_vcpu_tb_trans_cb(qemu_plugin_id_t, translated_t);
void qemu_plugin_register_vcpu_insn_exec_cb(struct qemu_plugin_insn *, executed_t, int, void *);
void qemu_plugin_register_vcpu_mem_cb(struct qemu_plugin_insn *, accessed_t, int, int, void *);
size_t qemu_plugin_tb_n_insns(const struct qemu_plugin_tb *);
struct qemu_plugin_insn *qemu_plugin_tb_get_insn(const struct qemu_plugin_tb *, size_t);
uint64_t qemu_plugin_insn_vaddr(const struct qemu_plugin_insn *);
bool qemu_plugin_mem_is_store(qemu_plugin_meminfo_t);

enum { NO_REGISTERS = 0, READS_AND_WRITES = 3, MOST = 256 };

typedef struct {
    uint64_t address, instructions, loads, stores;
    bool done;
} routine_t;

__attribute__((visibility("default"))) int qemu_plugin_version = 1;

static routine_t routines[MOST];
static size_t count;
static struct { uint64_t low, high; } callers[MOST];
static size_t caller_count;
static routine_t *current;
static char out[4096];

static void write_all(void)
{
    FILE *file = fopen(out, "w");
    if (file == NULL) {
        return;
    }
    for (size_t i = 0; i < count; i++) {
        if (routines[i].done) {
            fprintf(file, "%" PRIx64 " %" PRIu64 " %" PRIu64 " %" PRIu64 "\n",
                    routines[i].address, routines[i].instructions, routines[i].loads,
                    routines[i].stores);
        }
    }
    fclose(file);
}

static void accessed(unsigned int cpu, qemu_plugin_meminfo_t info, uint64_t address, void *data)
{
    (void)cpu;
    (void)address;
    (void)data;
    if (current != NULL && qemu_plugin_mem_is_store(info)) {
        current->stores++;
    } else if (current != NULL) {
        current->loads++;
    }
}

static void executed(unsigned int cpu, void *data)
{
    (void)cpu;
    (void)data;
    if (current != NULL) {
        current->instructions++;
    }
}

static void entered(unsigned int cpu, void *data)
{
    routine_t *one = data;
    if (current == NULL && !one->done) {
        current = one;
    }
    executed(cpu, NULL);
}

static void returned(unsigned int cpu, void *data)
{
    (void)cpu;
    (void)data;
    if (current != NULL) {
        current->done = true;
        current = NULL;
        write_all();
    }
}

static bool calls(uint64_t address)
{
    for (size_t i = 0; i < caller_count; i++) {
        if (address >= callers[i].low && address < callers[i].high) {
            return true;
        }
    }
    return false;
}

static routine_t *begins(uint64_t address)
{
    for (size_t i = 0; i < count; i++) {
        if (routines[i].address == address) {
            return &routines[i];
        }
    }
    return NULL;
}

static void translated(qemu_plugin_id_t id, struct qemu_plugin_tb *block)
{
    (void)id;
    const size_t length = qemu_plugin_tb_n_insns(block);
    for (size_t i = 0; i < length; i++) {
        struct qemu_plugin_insn *one = qemu_plugin_tb_get_insn(block, i);
        const uint64_t address = qemu_plugin_insn_vaddr(one);
        routine_t *routine = begins(address);
        if (calls(address)) {
            qemu_plugin_register_vcpu_insn_exec_cb(one, returned, NO_REGISTERS, NULL);
            continue;
        }
        qemu_plugin_register_vcpu_insn_exec_cb(
            one, routine != NULL ? entered : executed, NO_REGISTERS, routine);
        qemu_plugin_register_vcpu_mem_cb(one, accessed, NO_REGISTERS, READS_AND_WRITES, NULL);
    }
}

__attribute__((visibility("default")))
int qemu_plugin_install(qemu_plugin_id_t id, const qemu_info_t *info, int argc, char **argv)
{
    (void)info;
    for (int i = 0; i < argc; i++) {
        char *text = strchr(argv[i], '=');
        if (text == NULL) {
            return 1;
        }
        text++;
        if (strncmp(argv[i], "out=", 4) == 0) {
            snprintf(out, sizeof out, "%s", text);
        } else if (strncmp(argv[i], "routine=", 8) == 0 && count < MOST) {
            routines[count++].address = strtoull(text, NULL, 16);
        } else if (strncmp(argv[i], "caller=", 7) == 0 && caller_count < MOST) {
            callers[caller_count].low = strtoull(text, &text, 16);
            callers[caller_count++].high = strtoull(text + 1, NULL, 16);
        } else {
            return 1;
        }
    }
    qemu_plugin_register_vcpu_tb_trans_cb(id, translated);
    return 0;
}
