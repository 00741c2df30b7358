/* Start-up, serial lines, clock, tick and watchdog of the MPS2 board with the AN386 image.
 *
 * Registers: Arm, Cortex-M System Design Kit TRM (UART, watchdog) and Armv7-M Architecture Reference
 * Manual (SysTick, FPU, vectors); addresses: Arm application note AN386.
 */
#include "board.h"

#include <string.h>

#define REGISTER(address) (*(volatile uint32_t *)(uintptr_t)(address))

#define UART(line) (0x40004000u + 0x1000u * (uint32_t)(line))
#define UART_DATA 0x00u
#define UART_STATE 0x04u
#define UART_CTRL 0x08u
#define UART_BAUDDIV 0x10u
#define TX_FULL 1u
#define RX_FULL 2u
#define BOTH_ON 3u

#define WATCHDOG_LOAD REGISTER(0x40008000u)
#define WATCHDOG_CTRL REGISTER(0x40008008u)
#define WATCHDOG_CLEAR REGISTER(0x4000800Cu)
#define WATCHDOG_LOCK REGISTER(0x40008C00u)
#define WATCHDOG_KEY 0x1ACCE551u
#define BARK_AND_RESET 3u

#define LEDS REGISTER(0x40028000u)
#define BUTTONS REGISTER(0x40028008u)

#define SYST_CSR REGISTER(0xE000E010u)
#define SYST_RVR REGISTER(0xE000E014u)
#define SYST_CVR REGISTER(0xE000E018u)
#define CPACR REGISTER(0xE000ED88u)
#define ICSR REGISTER(0xE000ED04u)
#define TICK_PENDING (1u << 26)
#define CLOCK_OF_PROCESSOR 5u /* on, no interrupt */
#define WITH_INTERRUPT 7u

#define PAINT 0x5AA5C33Cu
/* Stack that board_stack_mark paints, and what it leaves out: its own frame. */
#define PAINTED 4096u
#define UNPAINTED 32u

extern uint32_t board_stack_top[], board_data_load[], board_data_start[], board_data_end[],
    board_bss_start[], board_bss_end[];
int main(void);

static void (*tick_function)(void);
static uint32_t counts_per_tick;
static volatile uint32_t ticks;
static uint32_t *marked;

/* ---- start ---- */

void board_reset(void)
{
    uint32_t *from = board_data_load, *to;

    CPACR |= 0xFu << 20; /* the FPU on */
    __asm volatile("dsb\n isb" ::: "memory");
    for (to = board_data_start; to < board_data_end; to++) {
        *to = *from++;
    }
    for (to = board_bss_start; to < board_bss_end; to++) {
        *to = 0u;
    }
    board_exit(main());
}

static void board_fault(void)
{
    board_exit(99);
}

static void board_systick(void)
{
    ticks = ticks + 1u;
    tick_function();
}

/* The watchdog's first time-out, which nothing masks; its second is the reset. */
static void board_bark(void)
{
    board_relay(0);
    board_text("watchdog: relay open\n");
    for (;;) {
    }
}

typedef void (*vector)(void);

__attribute__((section(".vectors"), used)) static const struct {
    uint32_t *stack;
    vector handlers[15];
} board_vectors = {
    board_stack_top,
    {board_reset, board_bark, board_fault, board_fault, board_fault, board_fault, 0, 0, 0, 0,
     board_fault, board_fault, 0, board_fault, board_systick}};

void board_start(void)
{
    uint32_t line;

    for (line = 0u; line < 2u; line++) {
        REGISTER(UART(line) + UART_BAUDDIV) = 16u;
        REGISTER(UART(line) + UART_CTRL) = BOTH_ON;
    }
    SYST_RVR = 0xFFFFFFu;
    SYST_CVR = 0u;
    SYST_CSR = CLOCK_OF_PROCESSOR;
}

/* ---- serial lines ---- */

int board_take(enum board_line line, uint8_t *byte)
{
    if ((REGISTER(UART(line) + UART_STATE) & RX_FULL) == 0u) {
        return 0;
    }
    *byte = (uint8_t)REGISTER(UART(line) + UART_DATA);
    return 1;
}

int board_give(enum board_line line, uint8_t byte)
{
    if ((REGISTER(UART(line) + UART_STATE) & TX_FULL) != 0u) {
        return 0;
    }
    REGISTER(UART(line) + UART_DATA) = byte;
    return 1;
}

static void put(char letter)
{
    while (!board_give(BOARD_CONSOLE, (uint8_t)letter)) {
    }
}

void board_text(const char *text)
{
    while (*text != '\0') {
        put(*text++);
    }
}

void board_whole(uint32_t value)
{
    char digits[11];
    uint32_t at = sizeof digits - 1u;

    digits[at] = '\0';
    do {
        digits[--at] = (char)('0' + value % 10u);
        value /= 10u;
    } while (value != 0u);
    board_text(digits + at);
}

void board_hex(uint32_t value)
{
    int shift;

    for (shift = 28; shift >= 0; shift -= 4) {
        put("0123456789abcdef"[(value >> shift) & 15u]);
    }
}

void board_figure(const char *name, uint32_t value)
{
    board_text(name);
    board_text(" ");
    board_whole(value);
    board_text("\n");
}

/* ---- clock ---- */

uint32_t board_counts(void)
{
    return SYST_CVR;
}

void board_tick_every(uint32_t counts, void (*tick)(void))
{
    tick_function = tick;
    counts_per_tick = counts;
    ticks = 0u;
    SYST_CSR = 0u;
    SYST_RVR = counts - 1u;
    SYST_CVR = 0u;
    SYST_CSR = WITH_INTERRUPT;
}

uint32_t board_now_us(void)
{
    uint32_t before, left, pending;

    /* Read again when the timer ran out between the readings. */
    do {
        before = ticks;
        left = SYST_CVR;
        pending = (ICSR & TICK_PENDING) != 0u ? 1u : 0u;
    } while (before != ticks || (pending != 0u && left < counts_per_tick / 2u));
    return (uint32_t)(((uint64_t)(before + pending) * counts_per_tick +
                       (counts_per_tick - 1u - left)) /
                      (BOARD_HZ / 1000000u));
}

/* ---- relay, button, watchdog ---- */

void board_relay(int closed)
{
    LEDS = closed ? 1u : 0u;
}

int board_stop_is_held(void)
{
    return (BUTTONS & 1u) != 0u;
}

void board_watchdog_start(uint32_t counts)
{
    WATCHDOG_LOCK = WATCHDOG_KEY;
    WATCHDOG_LOAD = counts;
    WATCHDOG_CTRL = BARK_AND_RESET;
    WATCHDOG_LOCK = 0u;
}

void board_watchdog_kick(void)
{
    WATCHDOG_LOCK = WATCHDOG_KEY;
    WATCHDOG_CLEAR = 1u;
    WATCHDOG_LOCK = 0u;
}

/* ---- rest ---- */

void board_rest(void)
{
    __asm volatile("wfi" ::: "memory");
}

/* ---- stack ---- */

void board_stack_mark(uint32_t *from)
{
    uint32_t *word;

    marked = from - UNPAINTED / 4u;
    for (word = marked - PAINTED / 4u; word < marked; word++) {
        *(volatile uint32_t *)word = PAINT;
    }
}

uint32_t board_stack_used(void)
{
    const uint32_t *word = marked - PAINTED / 4u;

    while (word < marked && *(const volatile uint32_t *)word == PAINT) {
        word++;
    }
    return (uint32_t)(marked - word) * 4u + UNPAINTED;
}

/* ---- end ---- */

void board_exit(int status)
{
    /* Semihosting SYS_EXIT_EXTENDED with ADP_Stopped_ApplicationExit. */
    uint32_t block[2];

    block[0] = 0x20026u;
    block[1] = (uint32_t)status;
    for (;;) {
        register uint32_t operation __asm("r0") = 0x20u;
        register uint32_t *parameter __asm("r1") = block;

        __asm volatile("bkpt 0xAB" : "+r"(operation) : "r"(parameter) : "memory");
    }
}
