/*
 * A test latch: example pin layer and main loop.
 *
 * Written by porter 0.1.0 from memo_toggle.yaml, SHA-256
 * 0000000000000000000000000000000000000000000000000000000000000000
 * Don't edit; remake it with: porter port memo_toggle.yaml -o DIR
 *
 * Same as the circuit for every sequence of any length.
 */
/* What is yours to fill in is marked FIT. Two parts are worked out below; any other stops the compiler.
 *
 * - Outputs float from reset until board_output(): fit a resistor that holds the load in its safe
 *   state meanwhile. The level is written before the direction, so that no wrong level ever shows.
 * - Brown-out detection must be on, at a level where the clock still runs within its limits.
 *   After a brown-out, a watchdog reset or a power cycle the latch starts in its power-on state.
 * - A press shorter than a tick may be missed; two changes within one tick count as simultaneous.
 */
#include "memo_toggle.h"

/* FIT.
 * PRESSED: the level that a pin reads while its button is pressed.
 * PULL_UP: 1 = the part pulls the pin up, as well as a resistor outside (a contact to ground).
 */
#define BOARD_PRESSED_PUSH 0u
#define BOARD_PULL_UP_PUSH 1u
/* FIT: the level of a pin while its output is active. */
#define BOARD_ACTIVE_LAMP 1u

/* What a part must bring. */
static void board_start(void);                     /* timer and watchdog */
static void board_input(uint8_t pin, uint8_t pull_up);
static uint8_t board_level(uint8_t pin);           /* 1 = high */
static void board_put(uint8_t pin, uint8_t level); /* works before board_output() as well */
static void board_output(uint8_t pin);
static void board_wait(void);                      /* until the next tick; feeds the watchdog */
static void board_rest(void);                      /* until a pin changes or the next tick */

#if defined(__AVR_ATtiny85__)

/* FIT: bits of port B. PB5 is the reset pin. */
#define BOARD_PIN_PUSH 0u
#define BOARD_OUT_LAMP 1u
#define BOARD_INPUTS ((1u << BOARD_PIN_PUSH))

#if (BOARD_PIN_PUSH > 4u) || (BOARD_OUT_LAMP > 4u)
#error "an ATtiny85 has the pins PB0 to PB4; take a larger part"
#endif

/* Settings: low fuse 0x62 as delivered (internal 8 MHz divided by 8), so 1 MHz; high fuse 0xDD for
 * brown-out at 2.7 V, or 0xDC for 4.3 V on a 5 V supply; extended fuse 0xFF. A wrong clock fuse makes every
 * time eight times too long or too short. The watchdog resets after 1 s without a tick; it is off in
 * power-down. Source: ATtiny25/45/85 data sheet (2586), from memory; check it against yours.
 */
#ifndef F_CPU
#define F_CPU 1000000UL
#endif

#include <avr/interrupt.h>
#include <avr/io.h>
#include <avr/sleep.h>
#include <avr/wdt.h>

/* The smallest prescaler with which a tick fits the 8-bit timer. */
#define BOARD_CYCLES ((F_CPU / 1000UL) * MEMO_TOGGLE_TICK_US / 1000UL)
#if BOARD_CYCLES <= 256UL
#define BOARD_PRESCALE 1UL
#define BOARD_CLOCK (1u << CS00)
#elif BOARD_CYCLES <= 2048UL
#define BOARD_PRESCALE 8UL
#define BOARD_CLOCK (1u << CS01)
#elif BOARD_CYCLES <= 16384UL
#define BOARD_PRESCALE 64UL
#define BOARD_CLOCK ((1u << CS01) | (1u << CS00))
#elif BOARD_CYCLES <= 65536UL
#define BOARD_PRESCALE 256UL
#define BOARD_CLOCK (1u << CS02)
#elif BOARD_CYCLES <= 262144UL
#define BOARD_PRESCALE 1024UL
#define BOARD_CLOCK ((1u << CS02) | (1u << CS00))
#else
#error "the tick is too long for the 8-bit timer: count several periods a tick"
#endif
#define BOARD_COUNTS ((BOARD_CYCLES + (BOARD_PRESCALE / 2UL)) / BOARD_PRESCALE)

/* Ticks since the start, modulo 256: only differences mean anything, so the wrap does no harm. */
static volatile uint8_t board_ticks;
static uint8_t board_seen;

ISR(TIMER0_COMPA_vect)
{
    board_ticks++;
}

/* Wakes the part from power-down; the next step reads the pins. */
EMPTY_INTERRUPT(PCINT0_vect)

static void board_start(void)
{
    MCUSR = 0u; /* or a watchdog reset would hold the watchdog at its shortest time */
    wdt_enable(WDTO_1S);
    TCCR0A = (1u << WGM01); /* count to OCR0A, then from 0 again */
    OCR0A = (uint8_t)(BOARD_COUNTS - 1UL);
    TIMSK = (1u << OCIE0A);
    TCCR0B = BOARD_CLOCK;
    PCMSK = BOARD_INPUTS;
    sei();
}

static void board_input(uint8_t pin, uint8_t pull_up)
{
    DDRB = (uint8_t)(DDRB & ~(1u << pin));
    board_put(pin, pull_up); /* an input's level bit is its pull-up */
}

static uint8_t board_level(uint8_t pin)
{
    return ((PINB & (1u << pin)) != 0u) ? 1u : 0u;
}

static void board_put(uint8_t pin, uint8_t level)
{
    if (level != 0u) {
        PORTB = (uint8_t)(PORTB | (1u << pin));
    } else {
        PORTB = (uint8_t)(PORTB & ~(1u << pin));
    }
}

static void board_output(uint8_t pin)
{
    DDRB = (uint8_t)(DDRB | (1u << pin));
}

static void board_wait(void)
{
    set_sleep_mode(SLEEP_MODE_IDLE);
    cli();
    while (board_ticks == board_seen) {
        sleep_enable();
        sei(); /* takes effect after the next instruction, so no tick slips in between */
        sleep_cpu();
        sleep_disable();
        cli();
    }
    sei();
    board_seen++;
    wdt_reset();
}

static uint8_t board_read(void);

static void board_rest(void)
{
    uint8_t held = board_read();

    wdt_disable();
    cli();
    GIFR = (1u << PCIF);
    GIMSK = (1u << PCIE);
    /* A change from here on wakes the part; one before it shows in the pins now. */
    if (board_read() == held) {
        set_sleep_mode(SLEEP_MODE_PWR_DOWN);
        sleep_enable();
        sei();
        sleep_cpu();
        sleep_disable();
    }
    sei();
    GIMSK = 0u;
    wdt_enable(WDTO_1S);
    /* The pins are read next; the tick after that comes a whole period later, or a press seen in so
     * many ticks in a row would count too early.
     */
    TCNT0 = 0u;
    GTCCR = (1u << PSR0);
    TIFR = (1u << OCF0A);
    board_seen = board_ticks;
}

#elif defined(PORTER_BOARD_NRF51)

/* FIT: port 0's bits. */
#define BOARD_PIN_PUSH 17u
#define BOARD_OUT_LAMP 3u

/* Settings: 16 MHz crystal; the brown-out reset is always on; the watchdog resets after 1 s without a
 * tick and runs while the core sleeps. Start-up code and linker script are the part's own.
 * Source of addresses: nRF51 Series Reference Manual 3.0, from memory; check them against yours.
 */
#define BOARD_REGISTER(address) (*(volatile uint32_t *)(address))
#define GPIO_OUTSET BOARD_REGISTER(0x50000508u)
#define GPIO_OUTCLR BOARD_REGISTER(0x5000050Cu)
#define GPIO_IN BOARD_REGISTER(0x50000510u)
#define GPIO_DIRSET BOARD_REGISTER(0x50000518u)
#define GPIO_CNF(pin) BOARD_REGISTER(0x50000700u + (4u * (uint32_t)(pin)))
#define CLOCK_HFCLKSTART BOARD_REGISTER(0x40000000u)
#define CLOCK_HFCLKSTARTED BOARD_REGISTER(0x40000100u)
#define TIMER0_START BOARD_REGISTER(0x40008000u)
#define TIMER0_CAPTURE1 BOARD_REGISTER(0x40008044u)
#define TIMER0_COMPARE0 BOARD_REGISTER(0x40008140u)
#define TIMER0_INTENSET BOARD_REGISTER(0x40008304u)
#define TIMER0_BITMODE BOARD_REGISTER(0x40008508u)
#define TIMER0_PRESCALER BOARD_REGISTER(0x40008510u)
#define TIMER0_CC0 BOARD_REGISTER(0x40008540u)
#define TIMER0_CC1 BOARD_REGISTER(0x40008544u)
#define WDT_START BOARD_REGISTER(0x40010000u)
#define WDT_CRV BOARD_REGISTER(0x40010504u)
#define WDT_RREN BOARD_REGISTER(0x40010508u)
#define WDT_RR0 BOARD_REGISTER(0x40010600u)
#define SCB_SCR BOARD_REGISTER(0xE000ED10u)
#define NVIC_ICPR BOARD_REGISTER(0xE000E280u)

static uint32_t board_due;

static uint32_t board_now(void)
{
    TIMER0_CAPTURE1 = 1u;
    return TIMER0_CC1;
}

static void board_start(void)
{
    CLOCK_HFCLKSTART = 1u;
    while (CLOCK_HFCLKSTARTED == 0u) {
        /* the crystal starts within a millisecond or so */
    }
    TIMER0_BITMODE = 3u;   /* 32 bits */
    TIMER0_PRESCALER = 4u; /* 16 MHz / 2^4: microseconds */
    TIMER0_INTENSET = 1uL << 16u;
    TIMER0_START = 1u;
    SCB_SCR = 1u << 4u; /* a pending interrupt wakes WFE without being taken */
    WDT_CRV = 32767u;   /* 32768 Hz: 1 s */
    WDT_RREN = 1u;
    WDT_START = 1u;
    board_due = board_now();
}

static void board_input(uint8_t pin, uint8_t pull_up)
{
    GPIO_CNF(pin) = (pull_up != 0u) ? (3u << 2u) : 0u; /* input, pulled up or left to an outside resistor */
}

static uint8_t board_level(uint8_t pin)
{
    return ((GPIO_IN & (1uL << pin)) != 0u) ? 1u : 0u;
}

static void board_put(uint8_t pin, uint8_t level)
{
    if (level != 0u) {
        GPIO_OUTSET = 1uL << pin;
    } else {
        GPIO_OUTCLR = 1uL << pin;
    }
}

static void board_output(uint8_t pin)
{
    GPIO_DIRSET = 1uL << pin;
}

static void board_wait(void)
{
    board_due += MEMO_TOGGLE_TICK_US;
    TIMER0_CC0 = board_due;
    /* The difference survives the counter's wrap after 71 minutes; a plain comparison would not. */
    while ((uint32_t)(board_now() - board_due) >= 0x80000000u) {
        __asm volatile("wfe");
        TIMER0_COMPARE0 = 0u;
        NVIC_ICPR = 1uL << 8u;
    }
    WDT_RR0 = 0x6E524635u;
}

static void board_rest(void)
{
    board_wait(); /* the core sleeps between ticks; add a pin-sense wake-up to stop the timer too */
}

#else
#error "FIT: write the board_ functions for your part as above, and choose the pins"
#endif

static uint8_t board_read(void)
{
    uint8_t held = 0u;

    if (board_level(BOARD_PIN_PUSH) == BOARD_PRESSED_PUSH) {
        held |= MEMO_TOGGLE_BUTTON_PUSH;
    }
    return held;
}

static void board_write(uint8_t active)
{
    board_put(BOARD_OUT_LAMP, ((active & MEMO_TOGGLE_OUTPUT_LAMP) != 0u)
                  ? BOARD_ACTIVE_LAMP : (BOARD_ACTIVE_LAMP ^ 1u));
}

int main(void)
{
    memo_toggle_t latch;
    volatile uint8_t settle;

    board_input(BOARD_PIN_PUSH, BOARD_PULL_UP_PUSH);
    board_start();
    for (settle = 0u; settle < 50u; settle++) {
        /* the pull-ups charge the wiring */
    }
    memo_toggle_init(&latch);
    board_write(memo_toggle_step(&latch, board_read()));
    board_output(BOARD_OUT_LAMP);
    for (;;) {
        if (memo_toggle_idle(&latch)) {
            board_rest();
        } else {
            board_wait();
        }
        board_write(memo_toggle_step(&latch, board_read()));
    }
}
