# Cortex-M4F with picolibc, for an emulator: semihosting brings the exit status out.
set(CMAKE_SYSTEM_NAME Generic)
set(CMAKE_SYSTEM_PROCESSOR arm)
set(CMAKE_C_COMPILER arm-none-eabi-gcc)
set(CMAKE_TRY_COMPILE_TARGET_TYPE STATIC_LIBRARY)
set(CMAKE_C_FLAGS_INIT
    "--specs=picolibc.specs -mthumb -mcpu=cortex-m4 -mfpu=fpv4-sp-d16 -mfloat-abi=hard")
string(CONCAT CMAKE_EXE_LINKER_FLAGS_INIT "--oslib=semihost --crt0=hosted "
    "-Wl,--defsym=__flash=0,--defsym=__flash_size=0x40000 "
    "-Wl,--defsym=__ram=0x20000000,--defsym=__ram_size=0x4000")
