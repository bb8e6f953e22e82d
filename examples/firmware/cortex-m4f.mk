# Cortex-M4F with picolibc, for an emulator: semihosting brings the exit status out.
CC := arm-none-eabi-gcc
PART := --specs=picolibc.specs -mthumb -mcpu=cortex-m4 -mfpu=fpv4-sp-d16 -mfloat-abi=hard
LINK := --oslib=semihost --crt0=hosted \
    -Wl,--defsym=__flash=0,--defsym=__flash_size=0x40000 \
    -Wl,--defsym=__ram=0x20000000,--defsym=__ram_size=0x4000
