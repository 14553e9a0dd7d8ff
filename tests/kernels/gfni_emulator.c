/*
 * The Galois field instructions for a CPU that lacks them, for tests: a library to be preloaded.
 *
 *     cc -O2 -shared -fPIC -o gfni_emulator.so gfni_emulator.c
 *     LD_PRELOAD=./gfni_emulator.so NUMBA_CPU_FEATURES=...,+gfni python ...
 *
 * An unknown instruction ends in SIGILL. The handler decodes the VEX forms of VGF2P8AFFINEQB, VGF2P8AFFINEINVQB
 * and VGF2P8MULB on xmm and ymm registers, with a register or memory as second source, works out the
 * result from the description in Intel's Software Developer's Manual, volume 2, and goes on behind the
 * instruction. Anything else (EVEX forms too) keeps its fatal signal.
 *
 * The saved registers: the low 128 bits lie in the FXSAVE area of the signal frame, the high 128 bits of the ymm
 * registers in its XSAVE extension at the offset that CPUID leaf 0DH names. See the manual, volume 1, chapter 13.
 */
#define _GNU_SOURCE
#include <cpuid.h>
#include <signal.h>
#include <stdint.h>
#include <string.h>
#include <ucontext.h>

enum { MAP_0F38 = 2, MAP_0F3A = 3, XSTATE_SSE = 2, XSTATE_AVX = 4, XSTATE_BV = 512 };

static unsigned ymm_high_offset;

/* For a test to see that instructions were emulated, not avoided. */
unsigned long emulated_instructions;

static const int general_registers[16] = {
    REG_RAX, REG_RCX, REG_RDX, REG_RBX, REG_RSP, REG_RBP, REG_RSI, REG_RDI,
    REG_R8,  REG_R9,  REG_R10, REG_R11, REG_R12, REG_R13, REG_R14, REG_R15,
};

struct instruction {
    int map, opcode, width;       /* width in bytes: 16 or 32 */
    int target, first, second;    /* vector registers; second is -1 for memory */
    const uint8_t *memory;
    int immediate;
    int length;
};

/* Multiplication in GF(2^8) modulo x^8 + x^4 + x^3 + x + 1, which these instructions have built in. */
static uint8_t multiply(uint8_t a, uint8_t b) {
    uint8_t product = 0;
    for (; b; b >>= 1) {
        if (b & 1) product ^= a;
        a = (uint8_t)(a << 1) ^ (a & 0x80 ? 0x1B : 0);
    }
    return product;
}

static uint8_t inverse(uint8_t a) {
    uint8_t power = 1;
    for (int i = 0; i < 254; i++) power = multiply(power, a);
    return power;
}

/* Bit i of the result is the parity of byte 7 - i of the matrix AND x, XOR bit i of the immediate. */
static uint8_t affine(const uint8_t *matrix, uint8_t x, int immediate) {
    uint8_t result = (uint8_t)immediate;
    for (int i = 0; i < 8; i++) result ^= (uint8_t)(__builtin_parity(matrix[7 - i] & x) << i);
    return result;
}

/* The address of a memory operand: ModRM byte at `at`, which the SIB byte and displacement follow. */
static const uint8_t *effective_address(const uint8_t *at, const greg_t *registers, int x, int b,
                                        int bytes_after, int *taken) {
    int mod = at[0] >> 6, rm = at[0] & 7;
    const uint8_t *next = at + 1;
    int64_t address = 0;
    int32_t displacement = 0;
    if (rm == 4) {
        int scale = next[0] >> 6, index = (next[0] >> 3 & 7) | x << 3, base = (next[0] & 7) | b << 3;
        int no_base = mod == 0 && (next[0] & 7) == 5;
        next++;
        if (index != 4) address += (int64_t)((uint64_t)registers[general_registers[index]] << scale);
        if (no_base) {
            memcpy(&displacement, next, 4);
            next += 4;
        } else {
            address += registers[general_registers[base]];
        }
    } else if (mod == 0 && rm == 5) {
        memcpy(&displacement, next, 4);
        next += 4;
        address = (int64_t)(next + bytes_after); /* relative to the next instruction */
    } else {
        address = registers[general_registers[rm | b << 3]];
    }
    if (mod == 1) displacement = (int8_t)*next++;
    if (mod == 2) {
        memcpy(&displacement, next, 4);
        next += 4;
    }
    *taken = (int)(next - at);
    return (const uint8_t *)(address + displacement);
}

/* Whether the bytes at `code` are one of the instructions; if so, its parts. */
static int decode(const uint8_t *code, const greg_t *registers, struct instruction *found) {
    if (code[0] != 0xC4) return 0; /* all three need the three-byte VEX prefix */
    int r = !(code[1] & 0x80), x = !(code[1] & 0x40), b = !(code[1] & 0x20);
    int w = code[2] >> 7, pp = code[2] & 3;
    found->map = code[1] & 31;
    found->opcode = code[3];
    found->width = code[2] & 4 ? 32 : 16;
    int is_affine = found->map == MAP_0F3A && w == 1 && (found->opcode == 0xCE || found->opcode == 0xCF);
    int is_product = found->map == MAP_0F38 && w == 0 && found->opcode == 0xCF;
    if (pp != 1 || !(is_affine || is_product)) return 0;

    const uint8_t *modrm = code + 4;
    int taken = 1;
    found->target = (modrm[0] >> 3 & 7) | r << 3;
    found->first = ~(code[2] >> 3) & 15;
    found->second = -1;
    if (modrm[0] >> 6 == 3)
        found->second = (modrm[0] & 7) | b << 3;
    else
        found->memory = effective_address(modrm, registers, x, b, is_affine, &taken);
    found->immediate = is_affine ? modrm[taken] : 0;
    found->length = 4 + taken + is_affine;
    return 1;
}

static void read_register(const uint8_t *saved, int number, uint8_t *value) {
    uint64_t present;
    memcpy(&present, saved + XSTATE_BV, 8);
    memcpy(value, saved + 160 + 16 * number, 16);
    if (present & XSTATE_AVX)
        memcpy(value + 16, saved + ymm_high_offset + 16 * number, 16);
    else
        memset(value + 16, 0, 16);
}

static void write_register(uint8_t *saved, int number, const uint8_t *value) {
    uint64_t present;
    memcpy(&present, saved + XSTATE_BV, 8);
    if (!(present & XSTATE_AVX)) memset(saved + ymm_high_offset, 0, 16 * 16);
    present |= XSTATE_SSE | XSTATE_AVX;
    memcpy(saved + XSTATE_BV, &present, 8);
    memcpy(saved + 160 + 16 * number, value, 16);
    memcpy(saved + ymm_high_offset + 16 * number, value + 16, 16);
}

static void execute(const struct instruction *it, uint8_t *saved) {
    uint8_t first[32], second[32], result[32] = {0};
    read_register(saved, it->first, first);
    if (it->second >= 0)
        read_register(saved, it->second, second);
    else
        memcpy(second, it->memory, (size_t)it->width);
    for (int i = 0; i < it->width; i++) {
        if (it->map == MAP_0F38)
            result[i] = multiply(first[i], second[i]);
        else
            result[i] = affine(second + i / 8 * 8, it->opcode == 0xCF ? inverse(first[i]) : first[i], it->immediate);
    }
    write_register(saved, it->target, result); /* a 128-bit form clears the high half */
}

static void on_illegal_instruction(int number, siginfo_t *info, void *context) {
    (void)info;
    greg_t *registers = ((ucontext_t *)context)->uc_mcontext.gregs;
    struct instruction found = {0};
    if (!decode((const uint8_t *)registers[REG_RIP], registers, &found)) {
        signal(number, SIG_DFL); /* the instruction is met again, and ends the process */
        return;
    }
    execute(&found, (uint8_t *)((ucontext_t *)context)->uc_mcontext.fpregs);
    registers[REG_RIP] += found.length;
    emulated_instructions++;
}

__attribute__((constructor)) static void install(void) {
    unsigned size, b, c, d;
    __cpuid_count(0x0D, 2, size, b, c, d);
    ymm_high_offset = b;
    struct sigaction action = {.sa_sigaction = on_illegal_instruction, .sa_flags = SA_SIGINFO | SA_NODEFER};
    sigaction(SIGILL, &action, 0);
}
