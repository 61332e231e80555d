"""An invented laboratory's campaign: true numbers, what its shots do, what its people write down."""
